"""What all structures share: scaling between the sections, delays, accumulators, and the finished Program."""

import math
from collections.abc import Sequence
from itertools import takewhile
from typing import TYPE_CHECKING

from attrs import evolve, frozen
from flint import fmpq

from afterkick.errors import Problem
from afterkick.fixed.carry import WIDEST_ACCUMULATOR, with_carry
from afterkick.fixed.narrow import rounding_offset
from afterkick.fixed.program import (
    Move,
    Overflow,
    Program,
    ProgramSection,
    Role,
    Rounding,
    SignalFormat,
    Sum,
    Term,
    Word,
)
from afterkick.fixed.quantise import ExactSection
from afterkick.fixed.ranges import Interval, largest_partial_sum, require_valid
from afterkick.fixed.scaling import FloatSection, norm_exponents
from afterkick.numbers import mid_float, working_bits

if TYPE_CHECKING:
    from afterkick.design.schema import Arithmetic, Signals
    from afterkick.sampling.sampled import Sampled

__all__ = [
    "LONGEST_DELAY",
    "SCALING_BITS",
    "Builder",
    "Signal",
    "bits_of",
    "delay_problems",
    "delayed",
    "finished",
    "float_section",
    "moves",
    "renamed",
    "scaled",
    "signal_chain",
    "signal_words",
    "unsupported",
]

LONGEST_DELAY = 256
"""Samples of whole delay that are built as a chain of words."""
SCALING_BITS = 128


@frozen
class Builder:
    """What all sections have in common."""

    data_bits: int
    coefficient_bits: int
    rounding: Rounding
    overflow: Overflow
    accumulator_bits: int | None

    @classmethod
    def of(cls, arithmetic: "Arithmetic") -> "Builder":
        """From the table of the design file."""
        return cls(
            arithmetic.data_bits,
            arithmetic.coefficient_bits,
            Rounding(arithmetic.rounding),
            Overflow(arithmetic.overflow),
            arithmetic.accumulator_bits,
        )

    @property
    def widest(self) -> int:
        """The widest accumulator that may be used."""
        return self.accumulator_bits or WIDEST_ACCUMULATOR

    def width(self, terms: tuple[Term, ...], ranges: dict[str, Interval], right_shift: int) -> int | None:
        """The accumulator for a sum: the given one, else 32 bits where they suffice, else 64; None where none does."""
        magnitude = largest_partial_sum(terms, ranges, rounding_offset(right_shift, self.rounding))
        choices = (self.accumulator_bits,) if self.accumulator_bits else (32, 64)
        return next((bits for bits in choices if magnitude < 1 << (bits - 1)), None)


def finished(
    sections: tuple[ProgramSection, ...],
    structure: str,
    sampled: "Sampled",
    arithmetic: "Arithmetic",
    signals: "Signals",
    name: str,
    *,
    title: str,
    digest: str,
) -> Program:
    """The Program of wired sections, from the word x to the word y, with the error feedback that is asked for.

    :raises Refused: where it is not valid.
    """
    program = Program(
        name=name,
        title=title or name,
        sections=sections,
        input="x",
        output="y",
        data_bits=arithmetic.data_bits,
        coefficient_bits=arithmetic.coefficient_bits,
        structure=structure,
        rounding=Rounding(arithmetic.rounding),
        overflow=Overflow(arithmetic.overflow),
        scaling=arithmetic.scaling,
        rate_hz=sampled.rate_hz,
        method=sampled.method,
        delay_samples=sampled.delay_samples,
        input_format=SignalFormat(signals.input.unit, signals.input.full_scale, signals.input.peak_or_full_scale),
        output_format=SignalFormat(signals.output.unit, signals.output.full_scale, signals.output.full_scale),
        digest=digest,
    )
    require_valid(program)
    if not arithmetic.carry:
        return program
    return with_carry(program, arithmetic.carry, widest_accumulator=arithmetic.accumulator_bits or WIDEST_ACCUMULATOR)


def delay_problems(delay_samples: int) -> list[Problem]:
    """One problem where the delay is too long for a chain of words."""
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


def scaled(
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
        driven = [evolve(sections[0], gain=peak), *sections[1:]]
        return norm_exponents([float_section(section) for section in driven], scaling)


def float_section(section: ExactSection) -> FloatSection:
    """The section in doubles, at the present working precision."""
    b, a = section.evaluate()
    exponent = math.floor(section.largest_numerator_log2() or 0.0)
    b0, b1, b2 = (mid_float(x * fmpq(2) ** -exponent) for x in b)
    return FloatSection((b0, b1, b2), (mid_float(a[1]), mid_float(a[2])), exponent)


def delayed(signal: str, samples: int) -> str:
    """The word that holds a signal as it was so many samples ago."""
    return f"{signal}_{samples}" if samples else signal


def signal_words(signal: str, role: Role, fraction_bits: int, depth: int, bits: int) -> tuple[Word, ...]:
    """The word of a signal and ``depth`` states for its past."""
    past = (Word(delayed(signal, i), bits, fraction_bits, Role.STATE) for i in range(1, depth + 1))
    return (Word(signal, bits, fraction_bits, role), *past)


def moves(signal: str, depth: int) -> tuple[Move, ...]:
    """One sample on: the oldest state first."""
    return tuple(Move(delayed(signal, i), delayed(signal, i - 1)) for i in range(depth, 0, -1))


def renamed(step: Sum, names: dict[str, str]) -> Sum:
    """The same step on other words."""
    terms = tuple(evolve(term, word=names[term.word]) for term in step.terms)
    return evolve(step, dest=names[step.dest], terms=terms)


@frozen
class Signal:
    """What one section of a cascade without histories is wired to."""

    source: str
    """The word it filters."""
    dest: Word
    words: tuple[Word, ...]
    """Those that the section declares: the input and its delay with the first section, and the section's own output."""
    moves: tuple[Move, ...]
    """The delay of the input, at the end of the first section."""
    gain_log2: int
    """The power of two that the scaling put into the section."""


def signal_chain(data_bits: int, exponents: Sequence[int], delay_samples: int) -> tuple[Signal, ...]:
    """The signals x, v1, v2, ..., y between sections, scaled by 2^-exponent; the delay is a chain behind x."""
    count = len(exponents)
    source = delayed("x", delay_samples)
    inputs = signal_words("x", Role.INPUT, data_bits - 1, delay_samples, data_bits)
    chain = []
    before = 0
    for k, exponent in enumerate(exponents):
        role, name = (Role.TEMPORARY, f"v{k + 1}") if k < count - 1 else (Role.OUTPUT, "y")
        dest = Word(name, data_bits, data_bits - 1 - exponent, role)
        chain.append(
            Signal(
                source,
                dest,
                (*(inputs if k == 0 else ()), dest),
                moves("x", delay_samples) if k == 0 else (),
                before - exponent,
            )
        )
        source, before = name, exponent
    return tuple(chain)


def bits_of(reach: Interval) -> int:
    """The width of the narrowest word that holds every integer of the interval."""
    return 1 + max(reach.highest.bit_length(), (~reach.lowest).bit_length() if reach.lowest < 0 else 0)


def unsupported(arithmetic: "Arithmetic") -> list[Problem]:
    """One problem for each option that these structures don't know."""
    checks = [
        ("kind", arithmetic.kind, arithmetic.kind == "fixed", '"fixed"', 'write kind = "fixed"'),
        ("clamp", "a clamp", arithmetic.clamp is None, "none in this structure", 'structure = "parallel"'),
    ]
    return [
        Problem(f"arithmetic.{key}", found, accepted, remedy)
        for key, found, supported, accepted, remedy in checks
        if not supported
    ]
