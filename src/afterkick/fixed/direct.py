"""The direct structure: a cascade of direct form I sections.

Each section is one sum over the present and the two past inputs and the two past outputs.  The history of a section's
output is the history of the next one's input, so the two share it.  Numerator and denominator have a binary point of
their own.  Where the numerator's is the finer one, its sum is brought to the denominator's scale first.
"""

from typing import TYPE_CHECKING

from attrs import frozen
from flint import fmpq

from afterkick.errors import Problem, Refused, each
from afterkick.fixed.cascade import (
    SCALING_BITS,
    Builder,
    delay_problems,
    delayed,
    finished,
    moves,
    renamed,
    scaled,
    signal_words,
    unsupported,
)
from afterkick.fixed.kept import exact_code_gain
from afterkick.fixed.program import (
    Program,
    ProgramSection,
    Role,
    Step,
    Sum,
    Term,
    Word,
)
from afterkick.fixed.pulse_grid import Integers
from afterkick.fixed.quantise import (
    ENOUGH_LAST_PLACES,
    REMEDY,
    ExactSection,
    Triple,
    denominator_fraction_bits,
    denominator_problems,
    exact_sections,
    numerator_fraction_bits,
    numerator_problems,
)
from afterkick.fixed.ranges import Interval, sum_range
from afterkick.fixed.search import searched
from afterkick.numbers import working_bits

if TYPE_CHECKING:
    from afterkick.design.schema import Arithmetic, Signals
    from afterkick.sampling.sampled import Sampled

__all__ = ["direct_program"]


def direct_program(
    sampled: "Sampled",
    arithmetic: "Arithmetic",
    signals: "Signals",
    name: str,
    *,
    title: str = "",
    digest: str = "",
    search: bool = True,
) -> Program:
    """The integer filter that realises H * (input full scale / output full scale) as a direct form I cascade.

    Without ``search`` every coefficient is the nearest integer, but for the exact zeros and poles that are kept.

    :raises Refused: with all problems of all sections: a coefficient that lost its meaning, a sum that no accumulator
        holds, a delay that is too long, or an option that this structure doesn't know.
    """
    problems = _unsupported(arithmetic) + delay_problems(sampled.delay_samples)
    if problems:
        raise Refused(problems)
    sections, exponents = scaled(exact_sections(sampled), arithmetic.scaling, signals)
    builder = Builder.of(arithmetic)
    plans = each(lambda section: _plan(section, builder), sections)
    if search:
        sections, plans = _searched(sections, plans, builder, exact_code_gain(sampled, signals))
    return finished(
        _wire(sections, plans, exponents, builder, sampled.delay_samples),
        "direct",
        sampled,
        arithmetic,
        signals,
        name,
        title=title,
        digest=digest,
    )


@frozen
class _Plan:
    """One section in integers; the sums name the words x0, x1, x2, y1, y2 and t, which the wiring then renames."""

    b: Triple
    b_bits: int
    a: Triple
    a_bits: int
    sums: tuple[Sum, ...]
    temporary_bits: int | None
    """The width of t, where the numerator has a sum of its own."""

    def history(self, signal: str) -> int:
        """How far back the sums read x or y, in samples."""
        read = (term.word for step in self.sums for term in step.terms)
        return max((int(word[1]) for word in read if word[0] == signal), default=0)


def _unsupported(arithmetic: "Arithmetic") -> list[Problem]:
    problems = unsupported(arithmetic)
    if arithmetic.state_bits not in (None, arithmetic.data_bits):
        found = f"states of {arithmetic.state_bits} bits"
        accepted = f"data_bits, {arithmetic.data_bits}: the states are data words"
        problems.append(Problem("arithmetic.state_bits", found, accepted, "leave state_bits out"))
    return problems


def _plan(section: ExactSection, builder: Builder) -> _Plan:
    """The finest binary points whose sums fit the accumulator.

    :raises Refused: where a coefficient loses its meaning or no accumulator holds the worst case.
    """
    a_bits = denominator_fraction_bits(section, builder.coefficient_bits)
    b_bits = numerator_fraction_bits(section, builder.coefficient_bits, a_bits + builder.widest - 2)
    if b_bits is None:
        where = f"section {section.number}"
        raise Refused(Problem(where, "the filter's gain is zero", "a filter that passes something", "check the model"))
    narrowed = False
    while a_bits >= 1:
        a, b = section.denominator(a_bits), section.numerator(b_bits)
        problems = denominator_problems(section, a, a_bits) + numerator_problems(section, b, b_bits)
        if problems and not narrowed:
            raise Refused(problems)
        if problems:
            break
        plan = _attempt(b, b_bits, a, a_bits, builder)
        if isinstance(plan, _Plan):
            faint = _faintness(plan, builder.data_bits)
            if faint:
                where = f"arithmetic.coefficient_bits, section {section.number}"
                enough = f"at least {ENOUGH_LAST_PLACES} last places"
                raise Refused(Problem(where, faint, enough, f"a smaller output full scale, {REMEDY}"))
            return plan
        narrowed = True
        if plan == "numerator":
            b_bits -= 1
        else:
            a_bits -= 1
        b_bits = min(b_bits, a_bits + builder.widest - 2)
    raise Refused(
        Problem(
            f"arithmetic, section {section.number}",
            "the worst-case sum does not fit the accumulator at any binary point that keeps the coefficients",
            f"a sum of at most {builder.widest} bits",
            "accumulator_bits = 64, narrower data, or a larger output full scale",
        )
    )


def _searched(
    sections: tuple[ExactSection, ...], plans: list[_Plan], builder: Builder, dc_gain: fmpq | None
) -> tuple[tuple[ExactSection, ...], list[_Plan]]:
    """The sections, with the gains they now have, and their plans after the search."""

    def plan(section: ExactSection, one: Integers) -> _Plan | None:
        problems = denominator_problems(section, one.a, one.a_bits) + numerator_problems(section, one.b, one.b_bits)
        if problems or max(map(abs, one.a + one.b)) > 1 << (builder.coefficient_bits - 1):
            return None
        found = _attempt(one.b, one.b_bits, one.a, one.a_bits, builder)
        return found if isinstance(found, _Plan) and not _faintness(found, builder.data_bits) else None

    plain = [Integers(one.b, one.b_bits, one.a, one.a_bits) for one in plans]
    chosen = searched(sections, plain, dc_gain, lambda section, one: plan(section, one) is not None)
    found = [(section, plan(section, one)) for section, one in chosen]
    return tuple(section for section, _ in found), [one for _, one in found if one is not None]


def _attempt(b: Triple, b_bits: int, a: Triple, a_bits: int, builder: Builder) -> "_Plan | str":
    """The section's sums at these binary points, or which of them, "numerator" or "feedback", is too wide."""
    whole = Interval.of_word(builder.data_bits)
    ranges = dict.fromkeys(("x0", "x1", "x2", "y1", "y2"), whole)
    feedback = tuple(Term(-a[i], f"y{i}", 0, f"a{i}") for i in (1, 2) if a[i])
    scale = a_bits if feedback else max(b_bits, 0)
    sums = []
    temporary_bits = None
    if b_bits > scale:
        terms = tuple(Term(b[i], f"x{i}", 0, f"b{i}") for i in range(3) if b[i])
        width = builder.width(terms, ranges, b_bits - scale)
        if width is None:
            return "numerator"
        partial = Sum("t", terms, width, b_bits - scale, builder.rounding, builder.overflow)
        ranges["t"] = sum_range(partial, ranges).result
        temporary_bits = 32 if ranges["t"] in Interval.of_word(32) else 64
        sums.append(partial)
        terms = (Term(1, "t"), *feedback)
    else:
        terms = tuple(Term(b[i], f"x{i}", scale - b_bits, f"b{i}") for i in range(3) if b[i]) + feedback
    width = builder.width(terms, ranges, scale)
    if width is None or scale > width - 2:
        return "feedback" if feedback else "numerator"
    sums.append(Sum("y0", terms, width, scale, builder.rounding, builder.overflow))
    return _Plan(b, b_bits, a, a_bits, tuple(sums), temporary_bits)


def _faintness(plan: _Plan, data_bits: int) -> str:
    """What is wrong with a numerator so small that it hardly moves the sum, however long its integers are."""
    if plan.temporary_bits is None:
        return ""
    partial = plan.sums[0]
    most = sum(abs(term.factor) for term in partial.terms) << (data_bits - 1) >> partial.right_shift
    return (
        f"a full-scale input moves the sum by {most} last places of 2^-{plan.a_bits}"
        if most < ENOUGH_LAST_PLACES
        else ""
    )


def _wire(
    sections: tuple[ExactSection, ...],
    plans: list[_Plan],
    exponents: list[int],
    builder: Builder,
    delay_samples: int,
) -> tuple[ProgramSection, ...]:
    """The words and steps of all sections, and how they hang together.

    Signal 0 is the input, signal k the output of section k.  A signal's history is moved on once both sections that
    read it are done: at the end of the section that filters it, and for the output at the end of the last one.
    """
    count = len(plans)
    signals = ["x", *(f"v{k}" for k in range(1, count)), "y"]
    roles = [Role.INPUT, *[Role.TEMPORARY] * (count - 1), Role.OUTPUT]
    binary_points = [builder.data_bits - 1 - exponent for exponent in (0, *exponents)]
    delays = [delay_samples] + [0] * count
    depths = [0] * (count + 1)
    for k, plan in enumerate(plans):
        depths[k] = max(depths[k], delays[k] + plan.history("x"))
        depths[k + 1] = plan.history("y")
    groups = [
        signal_words(*signal, builder.data_bits) for signal in zip(signals, roles, binary_points, depths, strict=True)
    ]
    wired = []
    for k, (section, plan) in enumerate(zip(sections, plans, strict=True)):
        names = {f"x{i}": delayed(signals[k], delays[k] + i) for i in range(3)}
        names |= {f"y{i}": delayed(signals[k + 1], i) for i in range(3)} | {"t": f"t{k + 1}"}
        words = groups[k + 1]
        if plan.temporary_bits is not None:
            scale = binary_points[k + 1] + plan.a_bits
            words = (Word(f"t{k + 1}", plan.temporary_bits, scale, Role.TEMPORARY), *words)
        if k == 0:
            words = groups[0] + words
        steps: tuple[Step, ...] = tuple(renamed(step, names) for step in plan.sums) + moves(signals[k], depths[k])
        if k == count - 1:
            steps += moves(signals[count], depths[count])
        with working_bits(SCALING_BITS):
            coefficients = section.coefficients(plan.b, plan.b_bits, plan.a, plan.a_bits)
        wired.append(
            ProgramSection(
                words=words,
                steps=steps,
                source=names["x0"],
                dest=names["y0"],
                b=plan.b,
                b_fraction_bits=plan.b_bits,
                a=plan.a,
                a_fraction_bits=plan.a_bits,
                coefficients=coefficients,
                gain_log2=(0, *exponents)[k] - exponents[k],
                marginal=section.marginal,
            )
        )
    return tuple(wired)
