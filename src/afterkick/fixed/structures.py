"""Which structure realises a filter: the one that is named, or the cheapest that is good enough.

The cost is a count of operations on a 32-bit core, per sample; simple, the same for every structure, and no instruction
count of any real core:

    read or write a word          1, of more than 32 bits 2
    multiply                      1, in a 64-bit accumulator 2, a word of more than 32 bits 4
    add a term                    1, in a 64-bit accumulator 2
    shift right and round         2, in a 64-bit accumulator 4
    saturate, wrap or clamp       2, in a 64-bit accumulator 4, where it is not proved that it never acts

A factor that is a power of two is no multiplication; neither is the first term of a sum an addition.
"""

from collections.abc import Callable, Sequence
from typing import TYPE_CHECKING, Protocol

from attrs import evolve, frozen

from afterkick.errors import Problem, Refused
from afterkick.fixed.carry import WIDEST_ACCUMULATOR, with_carry
from afterkick.fixed.coupled import coupled_program
from afterkick.fixed.delta import delta_program
from afterkick.fixed.direct import direct_program
from afterkick.fixed.parallel import parallel_program
from afterkick.fixed.program import Program, Role, Sum
from afterkick.fixed.ranges import analyse
from afterkick.fixed.relax import Relaxation, relax
from afterkick.fixed.transposed import transposed_program
from afterkick.fixed.worst_case import WorstCase

if TYPE_CHECKING:
    from afterkick.design.schema import Arithmetic, Signals
    from afterkick.sampling.sampled import Sampled

__all__ = ["CARRIED", "Candidate", "Judge", "build_program", "candidates", "chosen", "operations", "state_bytes"]

BITS_OF_REGISTER = 32
CARRIES = (0, 1, 2)
"""Orders of error feedback that are tried."""
CARRIED = ("direct", "transposed")
"""The structures that round so coarsely that it matters."""
INTEGRATING = "parallel"

Judge = Callable[[Program], Sequence[str]]
"""What a program falls short of, in words; nothing where it is good enough."""


class _Build(Protocol):
    def __call__(
        self, sampled: "Sampled", arithmetic: "Arithmetic", signals: "Signals", name: str, *, title: str, digest: str
    ) -> Program: ...


BUILDERS: dict[str, _Build] = {
    "direct": direct_program,
    "transposed": transposed_program,
    "delta": delta_program,
    "coupled": coupled_program,
    "parallel": parallel_program,
}


@frozen
class Candidate:
    """One structure for one filter."""

    structure: str
    carry: int
    program: Program | None
    """None where it was refused."""
    refused: tuple[Problem, ...] = ()
    falls_short: tuple[str, ...] | None = None
    """What the judge said; None where it was not asked, as a cheaper one was good enough."""
    relaxation: Relaxation | None = None
    """How the program was relaxed; None where it was not to be."""

    @property
    def operations(self) -> int | None:
        """The cost; None where there is no program."""
        return None if self.program is None else operations(self.program)

    @property
    def good_enough(self) -> bool:
        """Whether the judge found nothing."""
        return self.falls_short == ()


def build_program(
    sampled: "Sampled",
    arithmetic: "Arithmetic",
    signals: "Signals",
    name: str,
    *,
    title: str = "",
    digest: str = "",
    judge: Judge | None = None,
) -> Program:
    """The integer filter in the structure that ``arithmetic`` names, for "auto" the best of :func:`candidates`.

    :raises Refused: what the structure can't do, or for "auto" no structure can.
    """
    return chosen(candidates(sampled, arithmetic, signals, name, title=title, digest=digest, judge=judge))


def candidates(
    sampled: "Sampled",
    arithmetic: "Arithmetic",
    signals: "Signals",
    name: str,
    *,
    title: str = "",
    digest: str = "",
    judge: Judge | None = None,
) -> tuple[Candidate, ...]:
    """For "auto" every structure, the cheapest first and the refused ones last; else the one that is named.

    They are judged up to the first that is good enough; without a ``judge`` every program is.  Of a filter that
    integrates the parallel structure comes first: it alone keeps apart and clamps what integrates.  The direct and the
    transposed structure come with and without error feedback, unless ``arithmetic`` asks for it.

    :raises Refused: what the structure that is named can't do.
    """

    def built(structure: str) -> Program:
        one = evolve(arithmetic, structure=structure)
        return BUILDERS[structure](sampled, one, signals, name, title=title, digest=digest)

    if arithmetic.structure != "auto":
        named = Candidate(arithmetic.structure, arithmetic.carry, built(arithmetic.structure))
        return (_relaxed(named) if arithmetic.relax else named,)
    found: list[Candidate] = []
    for structure in BUILDERS:
        try:
            base = built(structure)
        except Refused as refusal:
            found.append(Candidate(structure, arithmetic.carry, None, refusal.problems))
            continue
        found.append(Candidate(structure, arithmetic.carry, base))
        if structure in CARRIED and not arithmetic.carry:
            found += _carried(base, arithmetic.accumulator_bits or WIDEST_ACCUMULATOR)
    if arithmetic.relax:
        found = [_relaxed(one) for one in found]
    integrates = sampled.marginal and any(pole.at_one() for pole in sampled.transfer().poles)
    made = sorted(
        (one for one in found if one.operations is not None),
        key=lambda one: (integrates and one.structure != INTEGRATING, one.operations or 0),
    )
    judged: list[Candidate] = []
    for one in made:
        if one.program is not None and not any(cheaper.good_enough for cheaper in judged):
            one = evolve(one, falls_short=tuple(judge(one.program)) if judge else ())
        judged.append(one)
    return (*judged, *(one for one in found if one.program is None))


def _carried(base: Program, widest: int) -> list[Candidate]:
    found = []
    for order in CARRIES[1:]:
        try:
            program = with_carry(base, order, widest_accumulator=widest)
        except Refused as refusal:
            found.append(Candidate(base.structure, order, None, refusal.problems))
            continue
        if program is not base:
            found.append(Candidate(base.structure, order, program))
    return found


def _relaxed(one: Candidate) -> Candidate:
    if one.program is None:
        return one
    try:
        program = relax(one.program, WorstCase(one.program).ranges)
    except Refused as refusal:
        return evolve(one, program=None, refused=refusal.problems)
    return evolve(one, program=program, relaxation=Relaxation(one.program, program))


def chosen(listed: Sequence[Candidate]) -> Program:
    """The first that is good enough; where none is, the one that falls short of the least, of equals the cheapest.

    :raises Refused: with all problems, where there is no program at all.
    """
    made = [(one, one.program) for one in listed if one.program is not None]
    if not made:
        raise Refused(
            problem if len(listed) == 1 else evolve(problem, found=f'structure "{one.structure}": {problem.found}')
            for one in listed
            for problem in one.refused
        )
    good = [program for one, program in made if one.good_enough]
    if good:
        return good[0]
    return min(made, key=lambda pair: len(pair[0].falls_short or ()))[1]


def operations(program: Program) -> int:
    """Per sample, by the table above."""
    may_overflow = analyse(program).may_overflow
    total = 0
    for step in program.steps:
        if not isinstance(step, Sum):
            total += 2 * _halves(program, step.dest)
            continue
        per_sum = 2 if step.accumulator_bits > BITS_OF_REGISTER else 1
        for i, term in enumerate(step.terms):
            halves = _halves(program, term.word)
            total += halves + (per_sum if i else 0)
            if abs(term.factor) & (abs(term.factor) - 1):
                total += 2 * per_sum if halves == 2 else per_sum
        held = step.dest in may_overflow or step.limits is not None
        total += 2 * per_sum * (bool(step.right_shift) + held) + _halves(program, step.dest)
        if step.residue is not None:
            total += per_sum + _halves(program, step.residue)
    return total


def _halves(program: Program, name: str) -> int:
    return 2 if program.word(name).bits > BITS_OF_REGISTER else 1


def state_bytes(program: Program) -> int:
    """What the caller keeps for each signal: the state words in integers of 8, 16, 32 or 64 bits."""
    return sum(max(8, 1 << (w.bits - 1).bit_length()) // 8 for w in program.words if w.role is Role.STATE)
