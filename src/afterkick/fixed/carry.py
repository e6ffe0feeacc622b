"""Error feedback as a pass over programs of any structure.

What a sum drops is added to the same sum one or two samples later, so that its rounding error e reaches the word as
(1 - 1/z)^order e: no error at DC, little below, and no dead band that grows with the sampling rate.
Source: Higgins and Munson, "Noise reduction strategies for digital filters: error spectrum shaping versus the optimal
linear state-space formulation", 1982; Laakso and Hartimo, "Noise reduction in recursive digital filters using
high-order error feedback", 1992.
"""

from attrs import evolve

from afterkick.errors import Problem, Refused
from afterkick.fixed.narrow import residue_limits
from afterkick.fixed.program import (
    Move,
    Program,
    ProgramSection,
    Role,
    Step,
    Sum,
    Term,
    Word,
    dependencies,
    with_accumulator,
)
from afterkick.fixed.ranges import analyse, require_valid

__all__ = ["with_carry"]

WIDEST_ACCUMULATOR = 64
FACTORS = {1: (1,), 2: (2, -1)}
"""By order: of the residues of one and two samples ago; 1 - (1 - 1/z)^order."""


def with_carry(program: Program, order: int, *, widest_accumulator: int = WIDEST_ACCUMULATOR) -> Program:
    """``program`` with error feedback of order 1 or 2 in every sum that rounds and whose word is fed back to it, or is
    added up by a state that integrates.

    A sum that needs it gets an accumulator of 64 bits, if ``widest_accumulator`` allows.  A program in which nothing is
    fed back is returned as it is.

    :raises Refused: for another order, a program that has error feedback already, or a sum that no accumulator holds.
    """
    if order not in FACTORS:
        raise Refused(Problem("arithmetic.carry", str(order), "the order 1 or 2", "choose one of these"))
    if any(isinstance(step, Sum) and step.residue for step in program.steps):
        raise Refused(
            Problem("arithmetic.carry", "a program with error feedback", "a program without", "apply it once")
        )
    require_valid(program)
    sections = tuple(_carried(program, section, FACTORS[order]) for section in program.sections)
    if sections == program.sections:
        return program
    return _with_room(evolve(program, sections=sections, carry=order), widest_accumulator)


def _carried(program: Program, section: ProgramSection, factors: tuple[int, ...]) -> ProgramSection:
    words: list[Word] = list(section.words)
    steps: list[Step] = []
    for step in section.steps:
        if not (isinstance(step, Sum) and step.right_shift and _feeds_back(program, step)):
            steps.append(step)
            continue
        residue = f"dropped_{step.dest}"
        past = [f"{residue}_{age}" for age in range(1, len(factors) + 1)]
        bits = _width(*residue_limits(step.right_shift, step.rounding))
        fraction_bits = program.word(step.dest).fraction_bits + step.right_shift
        words.append(Word(residue, bits, fraction_bits, Role.TEMPORARY))
        words += [Word(name, bits, fraction_bits, Role.STATE) for name in past]
        terms = tuple(Term(factor, name) for factor, name in zip(factors, past, strict=True))
        steps.append(evolve(step, terms=step.terms + terms, residue=residue))
        steps += [Move(dest, source) for dest, source in reversed(list(zip(past, [residue, *past], strict=False)))]
    return evolve(section, words=tuple(words), steps=tuple(steps))


def _feeds_back(program: Program, step: Sum) -> bool:
    """Whether the sum's word has an influence on the sum itself at a later sample, or is added up by a state."""
    if step.dest in dependencies(program, (term.word for term in step.terms)):
        return True
    adding = (other for other in program.steps if isinstance(other, Sum) and other.right_shift == 0)
    return any(step.dest in (words := [t.word for t in other.terms]) and other.dest in words for other in adding)


def _width(lowest: int, highest: int) -> int:
    """The narrowest word that holds both; no word has fewer than 2 bits."""
    return max(2, (-lowest - 1).bit_length() + 1, highest.bit_length() + 1)


def _with_room(program: Program, widest: int) -> Program:
    """The residue adds a hair to a sum: where that is too much for 32 bits, the sum gets 64."""
    faults = analyse(program).faults
    for name in [step.dest for step in program.steps if isinstance(step, Sum) and step.residue]:
        if faults and widest == WIDEST_ACCUMULATOR:
            # The walk ends at the first fault, so that another one shows that this sum was it.
            wider = with_accumulator(program, name, WIDEST_ACCUMULATOR)
            left = analyse(wider).faults
            if left != faults:
                program, faults = wider, left
    if faults:
        raise Refused(
            Problem(
                "arithmetic.carry",
                "error feedback, for which a sum of the program has no room",
                f"sums of at most {widest} bits",
                "accumulator_bits = 64, or narrower data or coefficients",
            )
        )
    return program
