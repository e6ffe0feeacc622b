"""The transposed structure: a cascade of transposed direct form II sections.

y = (b0 x + s1) rounded;  s1' = b1 x - a1 y + s2;  s2' = b2 x - a2 y

The states are sums of products at the scale of the sum: as wide as they need to be, they are exact, and a section
rounds nowhere but at its output.  So with equal binary points it gives the bits of the direct structure, with two
states instead of four words of history.  With ``state_bits`` the states are narrower and round too.
"""

from typing import TYPE_CHECKING

from attrs import frozen
from flint import fmpq

from afterkick.errors import Problem, Refused, each
from afterkick.fixed.cascade import (
    SCALING_BITS,
    Builder,
    Signal,
    bits_of,
    delay_problems,
    finished,
    renamed,
    scaled,
    signal_chain,
    unsupported,
)
from afterkick.fixed.kept import exact_code_gain
from afterkick.fixed.program import Program, ProgramSection, Role, Sum, Term, Word
from afterkick.fixed.pulse_grid import Integers
from afterkick.fixed.quantise import (
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

__all__ = ["transposed_program"]


def transposed_program(
    sampled: "Sampled",
    arithmetic: "Arithmetic",
    signals: "Signals",
    name: str,
    *,
    title: str = "",
    digest: str = "",
    search: bool = True,
) -> Program:
    """The integer filter that realises H * (input full scale / output full scale), transposed direct form II.

    Without ``search`` every coefficient is the nearest integer, but for the exact zeros and poles that are kept.

    :raises Refused: with all problems of all sections: a coefficient that lost its meaning, a sum that no accumulator
        holds, a delay that is too long, or an option that this structure doesn't know.
    """
    problems = unsupported(arithmetic) + delay_problems(sampled.delay_samples)
    if problems:
        raise Refused(problems)
    sections, exponents = scaled(exact_sections(sampled), arithmetic.scaling, signals)
    builder, state_bits = Builder.of(arithmetic), arithmetic.state_bits
    plans = each(lambda section: _plan(section, builder, state_bits), sections)
    if search:
        sections, plans = _searched(sections, plans, builder, state_bits, exact_code_gain(sampled, signals))
    chain = signal_chain(builder.data_bits, exponents, sampled.delay_samples)
    wired = tuple(_wired(*each) for each in zip(sections, plans, chain, strict=True))
    return finished(wired, "transposed", sampled, arithmetic, signals, name, title=title, digest=digest)


@frozen
class _Plan:
    """One section in integers: the output's sum, then that of each state."""

    b: Triple
    b_bits: int
    a: Triple
    a_bits: int
    sums: tuple[Sum, ...]
    """Of the words x and y, which the wiring then renames."""
    state_bits: tuple[int, ...]
    state_scales: tuple[int, ...]
    """Fraction bits of each state, counted from the last place of the output."""


def _plan(section: ExactSection, builder: Builder, state_bits: int | None) -> _Plan:
    """The finest binary points whose sums fit the accumulator.

    :raises Refused: where a coefficient loses its meaning or no accumulator holds the worst case.
    """
    a_bits = denominator_fraction_bits(section, builder.coefficient_bits)
    b_bits = numerator_fraction_bits(section, builder.coefficient_bits, builder.widest - 2)
    where = f"arithmetic, section {section.number}"
    if b_bits is None:
        raise Refused(Problem(where, "the filter's gain is zero", "a filter that passes something", "check the model"))
    fits = True
    while a_bits >= 1:
        a, b = section.denominator(a_bits), section.numerator(b_bits)
        problems = denominator_problems(section, a, a_bits) + numerator_problems(section, b, b_bits)
        if problems and fits:
            raise Refused(problems)
        if problems:
            break
        plan = _attempt(section.number, Integers(b, b_bits, a, a_bits), builder, state_bits)
        if plan is not None:
            return plan
        fits = False
        if b_bits >= a_bits:
            b_bits -= 1
        if b_bits < a_bits:
            a_bits -= 1
    raise Refused(
        Problem(
            where,
            "the worst-case sum does not fit the accumulator at any binary point that keeps the coefficients",
            f"a sum of at most {builder.widest} bits",
            "accumulator_bits = 64, narrower data, or a larger output full scale",
        )
    )


def _searched(
    sections: tuple[ExactSection, ...],
    plans: list[_Plan],
    builder: Builder,
    state_bits: int | None,
    dc_gain: fmpq | None,
) -> tuple[tuple[ExactSection, ...], list[_Plan]]:
    """The sections, with the gains they now have, and their plans after the search."""

    def plan(section: ExactSection, one: Integers) -> _Plan | None:
        problems = denominator_problems(section, one.a, one.a_bits) + numerator_problems(section, one.b, one.b_bits)
        if problems or max(map(abs, one.a + one.b)) > 1 << (builder.coefficient_bits - 1):
            return None
        return _attempt(section.number, one, builder, state_bits)

    plain = [Integers(one.b, one.b_bits, one.a, one.a_bits) for one in plans]
    chosen = searched(sections, plain, dc_gain, lambda section, one: plan(section, one) is not None)
    found = [(section, plan(section, one)) for section, one in chosen]
    return tuple(section for section, _ in found), [one for _, one in found if one is not None]


def _attempt(number: int, one: Integers, builder: Builder, state_bits: int | None) -> _Plan | None:
    """The section's sums with these integers; None where one of them is too wide."""
    b, a = one.b, one.a
    feedback = any(a[1:])
    scale = max(one.a_bits, one.b_bits) if feedback else max(one.b_bits, 0)
    up, back = scale - one.b_bits, scale - one.a_bits
    ranges = {"x": Interval.of_word(builder.data_bits), "y": Interval.of_word(builder.data_bits)}
    previous: str | None = None
    drop = 0
    sums: list[Sum] = []
    widths: list[int] = []
    scales: list[int] = []
    for order in (2, 1, 0):
        listed = [Term(b[order], "x", up, f"b{order}")] if b[order] else []
        if order and a[order]:
            listed.append(Term(-a[order], "y", back, f"a{order}"))
        if previous:
            listed.append(Term(1, previous, drop))
        terms = tuple(listed)
        if order and not terms:
            continue
        result = "y" if order == 0 else f"s{number}{'ab'[order - 1]}"
        places = scale
        if order:
            places = 0 if state_bits is None else _places_to_drop(terms, ranges, state_bits, builder)
        width = builder.width(terms, ranges, places)
        if width is None or places > width - 2:
            return None
        step = Sum(result, terms, width, places, builder.rounding, builder.overflow)
        sums.append(step)
        if order:
            reach = sum_range(step, ranges).result
            ranges[result] = Interval.of_word(bits_of(reach))
            widths.append(bits_of(reach))
            scales.append(scale - places)
            previous, drop = result, places
    # the output first, and each state before the one that feeds it
    order_of_steps = tuple(reversed(sums)), tuple(reversed(widths)), tuple(reversed(scales))
    return _Plan(b, one.b_bits, a, one.a_bits, *order_of_steps)


def _wired(section: ExactSection, plan: _Plan, signal: Signal) -> ProgramSection:
    states = tuple(
        Word(step.dest, bits, signal.dest.fraction_bits + scale, Role.STATE)
        for step, bits, scale in zip(plan.sums[1:], plan.state_bits, plan.state_scales, strict=True)
    )
    names = {state.name: state.name for state in states} | {"x": signal.source, "y": signal.dest.name}
    with working_bits(SCALING_BITS):
        coefficients = section.coefficients(plan.b, plan.b_bits, plan.a, plan.a_bits)
    return ProgramSection(
        words=(*signal.words, *states),
        steps=(*(renamed(step, names) for step in plan.sums), *signal.moves),
        source=signal.source,
        dest=signal.dest.name,
        b=plan.b,
        b_fraction_bits=plan.b_bits,
        a=plan.a,
        a_fraction_bits=plan.a_bits,
        coefficients=coefficients,
        gain_log2=signal.gain_log2,
        marginal=section.marginal,
    )


def _places_to_drop(terms: tuple[Term, ...], ranges: dict[str, Interval], bits: int, builder: Builder) -> int:
    """How many of a state's lowest bits must go so that it fits ``bits`` bits."""
    exact = Sum("", terms, 64, 0, builder.rounding, builder.overflow)
    places = max(0, bits_of(sum_range(exact, ranges).result) - bits)
    rounded = Sum("", terms, 64, places, builder.rounding, builder.overflow)
    return places + (sum_range(rounded, ranges).result not in Interval.of_word(bits))
