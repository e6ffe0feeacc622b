"""The direct structure: a cascade of direct form I sections.

Each section is one sum over the present and the two past inputs and the two past outputs.  The history of a section's
output is the history of the next one's input, so the two share it.  Numerator and denominator have a binary point of
their own.  Where the numerator's is the finer one, its sum is brought to the denominator's scale first.
"""

import math
from itertools import takewhile
from typing import TYPE_CHECKING

from attrs import evolve, frozen
from flint import fmpq

from afterkick.errors import Problem, Refused
from afterkick.fixed.narrow import rounding_offset
from afterkick.fixed.program import (
    Move,
    Overflow,
    Program,
    ProgramSection,
    Role,
    Rounding,
    SignalFormat,
    Step,
    Sum,
    Term,
    Word,
)
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
from afterkick.fixed.ranges import Interval, largest_partial_sum, require_valid, sum_range
from afterkick.fixed.scaling import FloatSection, norm_exponents
from afterkick.numbers import mid_float, working_bits

if TYPE_CHECKING:
    from afterkick.design.schema import Arithmetic, Signals
    from afterkick.sampling.sampled import Sampled

__all__ = ["LONGEST_DELAY", "direct_program"]

LONGEST_DELAY = 256
"""Samples of whole delay that are built as a chain of words."""
SCALING_BITS = 128


def direct_program(
    sampled: "Sampled", arithmetic: "Arithmetic", signals: "Signals", name: str, *, title: str = "", digest: str = ""
) -> Program:
    """The integer filter that realises H * (input full scale / output full scale) as a direct form I cascade.

    :raises Refused: with all problems of all sections: a coefficient that lost its meaning, a sum that no accumulator
        holds, a delay that is too long, or an option that this structure doesn't know.
    """
    problems = _unsupported(arithmetic) + _delay_problems(sampled.delay_samples)
    if problems:
        raise Refused(problems)
    sections, exponents = _scaled(exact_sections(sampled), arithmetic.scaling, signals)
    builder = _Builder(
        arithmetic.data_bits,
        arithmetic.coefficient_bits,
        Rounding(arithmetic.rounding),
        Overflow(arithmetic.overflow),
        arithmetic.accumulator_bits,
    )
    plans: list[_Plan] = []
    for section in sections:
        try:
            plans.append(_plan(section, builder))
        except Refused as refusal:
            problems += refusal.problems
    if problems:
        raise Refused(problems)
    program = Program(
        name=name,
        title=title or name,
        sections=_wire(sections, plans, exponents, builder, sampled.delay_samples),
        input="x",
        output="y",
        data_bits=arithmetic.data_bits,
        coefficient_bits=arithmetic.coefficient_bits,
        structure="direct",
        rounding=builder.rounding,
        overflow=builder.overflow,
        scaling=arithmetic.scaling,
        rate_hz=sampled.rate_hz,
        method=sampled.method,
        delay_samples=sampled.delay_samples,
        input_format=SignalFormat(signals.input.unit, signals.input.full_scale, signals.input.peak_or_full_scale),
        output_format=SignalFormat(signals.output.unit, signals.output.full_scale, signals.output.full_scale),
        digest=digest,
    )
    require_valid(program)
    return program


@frozen
class _Builder:
    """What all sections have in common."""

    data_bits: int
    coefficient_bits: int
    rounding: Rounding
    overflow: Overflow
    accumulator_bits: int | None

    @property
    def widest(self) -> int:
        """The widest accumulator that may be used."""
        return self.accumulator_bits or 64

    def width(self, terms: tuple[Term, ...], ranges: dict[str, Interval], right_shift: int) -> int | None:
        """The accumulator for a sum: the given one, else 32 bits where they suffice, else 64; None where none does."""
        magnitude = largest_partial_sum(terms, ranges, rounding_offset(right_shift, self.rounding))
        choices = (self.accumulator_bits,) if self.accumulator_bits else (32, 64)
        return next((bits for bits in choices if magnitude < 1 << (bits - 1)), None)


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
    later = "not supported yet"
    checks = [
        ("kind", arithmetic.kind, arithmetic.kind == "fixed", '"fixed"'),
        ("structure", arithmetic.structure, arithmetic.structure == "direct", '"direct"'),
        ("carry", "true", not arithmetic.carry, "false"),
        ("state_bits", str(arithmetic.state_bits), arithmetic.state_bits in (None, arithmetic.data_bits), "data_bits"),
        ("clamp", "a clamp", arithmetic.clamp is None, "no clamp"),
    ]
    return [
        Problem(f"arithmetic.{key}", f"{found} is {later}", accepted, f"leave {key} out")
        for key, found, supported, accepted in checks
        if not supported
    ]


def _delay_problems(delay_samples: int) -> list[Problem]:
    if delay_samples <= LONGEST_DELAY:
        return []
    return [
        Problem(
            "sampling",
            f"the filter delays by {_count_text(delay_samples)} whole samples",
            f"at most {LONGEST_DELAY} samples",
            "a lower sampling rate, or take the dead time out of the model and delay the input in your own buffer",
        )
    ]


def _count_text(count: int) -> str:
    return str(count) if count < 10**12 else "more than 10^12"


def _scaled(
    sections: tuple[ExactSection, ...], scaling: str, signals: "Signals"
) -> tuple[tuple[ExactSection, ...], list[int]]:
    """The sections with their gains, and e of each: up to its output the whole is scaled by 2^-e.

    Powers of two between the sections; the last one undoes them and carries the exact ratio of the full scales.
    """
    ratio = signals.input.full_scale / signals.output.full_scale
    inner = sections[:-1]
    exponents = [0] * len(sections)
    if scaling != "none" and inner:
        stable = list(takewhile(lambda section: not (section.marginal or section.unstable), inner))
        peak = signals.input.peak_or_full_scale / signals.input.full_scale
        norms = _norm_exponents(stable, scaling, peak) if stable else []
        # The output of an integrator or an unstable section has no norm: the full scale of the whole filter's output
        # limits it.
        fallback = round(math.log2(int(ratio.denominator)) - math.log2(int(ratio.numerator)))
        norms += [None] * (len(inner) - len(stable))
        exponents = [fallback if norm is None else norm for norm in norms] + [0]
    gains = [fmpq(2) ** (before - after) for before, after in zip([0, *exponents], exponents, strict=False)]
    gains[-1] *= ratio
    return tuple(evolve(section, gain=gain) for section, gain in zip(sections, gains, strict=True)), exponents


def _norm_exponents(sections: list[ExactSection], scaling: str, peak: fmpq) -> list[int | None]:
    with working_bits(SCALING_BITS):
        scaled = [evolve(sections[0], gain=peak), *sections[1:]]
        return norm_exponents([_float_section(section) for section in scaled], scaling)


def _float_section(section: ExactSection) -> FloatSection:
    b, a = section.evaluate()
    exponent = math.floor(section.largest_numerator_log2() or 0.0)
    b0, b1, b2 = (mid_float(x * fmpq(2) ** -exponent) for x in b)
    return FloatSection((b0, b1, b2), (mid_float(a[1]), mid_float(a[2])), exponent)


def _plan(section: ExactSection, builder: _Builder) -> _Plan:
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
            _refuse_faint(section, plan, builder.data_bits)
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


def _attempt(b: Triple, b_bits: int, a: Triple, a_bits: int, builder: _Builder) -> "_Plan | str":
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


def _refuse_faint(section: ExactSection, plan: _Plan, data_bits: int) -> None:
    """A numerator so small that it hardly moves the sum, however long its integers are."""
    if plan.temporary_bits is None:
        return
    partial = plan.sums[0]
    most = sum(abs(term.factor) for term in partial.terms) << (data_bits - 1) >> partial.right_shift
    if most < ENOUGH_LAST_PLACES:
        raise Refused(
            Problem(
                f"arithmetic.coefficient_bits, section {section.number}",
                f"a full-scale input moves the sum by {most} last places of 2^-{plan.a_bits}",
                f"at least {ENOUGH_LAST_PLACES} last places",
                f"a smaller output full scale, {REMEDY}",
            )
        )


def _wire(
    sections: tuple[ExactSection, ...],
    plans: list[_Plan],
    exponents: list[int],
    builder: _Builder,
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
        _signal_words(*signal, builder.data_bits) for signal in zip(signals, roles, binary_points, depths, strict=True)
    ]
    wired = []
    for k, (section, plan) in enumerate(zip(sections, plans, strict=True)):
        names = {f"x{i}": _delayed(signals[k], delays[k] + i) for i in range(3)}
        names |= {f"y{i}": _delayed(signals[k + 1], i) for i in range(3)} | {"t": f"t{k + 1}"}
        words = groups[k + 1]
        if plan.temporary_bits is not None:
            scale = binary_points[k + 1] + plan.a_bits
            words = (Word(f"t{k + 1}", plan.temporary_bits, scale, Role.TEMPORARY), *words)
        if k == 0:
            words = groups[0] + words
        steps: tuple[Step, ...] = tuple(_renamed(step, names) for step in plan.sums) + _moves(signals[k], depths[k])
        if k == count - 1:
            steps += _moves(signals[count], depths[count])
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


def _delayed(signal: str, samples: int) -> str:
    return f"{signal}_{samples}" if samples else signal


def _signal_words(signal: str, role: Role, fraction_bits: int, depth: int, bits: int) -> tuple[Word, ...]:
    past = (Word(_delayed(signal, i), bits, fraction_bits, Role.STATE) for i in range(1, depth + 1))
    return (Word(signal, bits, fraction_bits, role), *past)


def _moves(signal: str, depth: int) -> tuple[Move, ...]:
    return tuple(Move(_delayed(signal, i), _delayed(signal, i - 1)) for i in range(depth, 0, -1))


def _renamed(step: Sum, names: dict[str, str]) -> Sum:
    terms = tuple(evolve(term, word=names[term.word]) for term in step.terms)
    return evolve(step, dest=names[step.dest], terms=terms)
