"""A filter as a short straight-line program in single precision: data, not code.

As with the integer programs, the simulator interprets the steps, the C is printed from them, and the estimates count
their roundings: so they can't disagree.  Every product and every sum of two numbers rounds to the nearest single
(IEEE 754 binary32), ties to even; nothing is fused.
"""

from collections.abc import Iterator

from attrs import frozen
from flint import fmpq

from afterkick.fixed.program import Move, Role, SignalFormat

__all__ = [
    "FloatCoefficient",
    "FloatFlush",
    "FloatProduct",
    "FloatProgram",
    "FloatProgramSection",
    "FloatStep",
    "FloatSum",
    "FloatWord",
    "float_dc_gain",
]

# Coefficients are Python floats that are exactly singles.


@frozen
class FloatWord:
    """A single; its value is in the unit of its signal."""

    name: str
    role: Role


@frozen
class FloatProduct:
    """``dest = factor * word``, one rounding."""

    dest: str
    factor: float
    word: str
    label: str
    """Which of the section's coefficients the factor is."""


@frozen
class FloatSum:
    """``dest`` = the signed words added from left to right, each addition rounded."""

    dest: str
    terms: tuple[tuple[int, str], ...]
    """(1 or -1, word)."""


@frozen
class FloatFlush:
    """All of ``states`` become zero where all are below ``threshold`` in magnitude.

    One by one they must not: without its other state, what is left of a section need not decay.
    """

    states: tuple[str, ...]
    threshold: float


FloatStep = FloatProduct | FloatSum | FloatFlush | Move


@frozen
class FloatCoefficient:
    """One stored coefficient beside the number it was rounded from."""

    name: str
    """b0, b1, b2 (of the present input and the two before) or a1, a2 (of the two outputs before)."""
    value: float
    wanted: str
    """The number that was rounded, in decimal to 9 significant digits."""
    error_last_places: float
    """(stored - wanted) / last place; an estimate good to double precision."""


@frozen
class FloatProgramSection:
    """H = (b[0] + b[1]/z + b[2]/z^2) / (a[0] + a[1]/z + a[2]/z^2), a[0] = 1, in transposed direct form II."""

    words: tuple[FloatWord, ...]
    steps: tuple[FloatStep, ...]
    source: str
    """The word the section filters."""
    dest: str
    """The word that receives the result."""
    b: tuple[float, float, float]
    a: tuple[float, float, float]
    coefficients: tuple[FloatCoefficient, ...]
    """Of b and of a[1:], those that are not exactly zero."""
    numerator_scale: str
    """What the exact numerator was multiplied by, so that rounding 1 + a1 + a2 leaves the DC gain alone; empty where
    it was not."""
    marginal: bool
    """Whether the section has a pole on the unit circle."""

    @property
    def exact_b(self) -> tuple[fmpq, fmpq, fmpq]:
        """The stored numerator as rationals."""
        b0, b1, b2 = (_rational(value) for value in self.b)
        return b0, b1, b2

    @property
    def exact_a(self) -> tuple[fmpq, fmpq, fmpq]:
        """The stored denominator as rationals."""
        a0, a1, a2 = (_rational(value) for value in self.a)
        return a0, a1, a2

    @property
    def a_at_one(self) -> fmpq:
        """1 + a1 + a2, exactly."""
        return sum(self.exact_a, fmpq(0))


@frozen
class FloatProgram:
    """Everything that the shipped singles do, and what the printers say about it."""

    name: str
    """A C identifier, the prefix of every emitted symbol."""
    title: str
    sections: tuple[FloatProgramSection, ...]
    input: str
    output: str
    rate_hz: fmpq
    method: str
    delay_samples: int
    """The whole samples of delay that the program itself adds in front of its sections."""
    input_format: SignalFormat
    output_format: SignalFormat
    flush_below: float | None
    """A section whose states are all below this becomes zero; None: left alone."""
    digest: str = ""
    """Of the design; printed, never interpreted."""

    @property
    def words(self) -> tuple[FloatWord, ...]:
        """The words that signals and states are, in the order of the sections; products are not among them."""
        return tuple(word for section in self.sections for word in section.words)

    @property
    def states(self) -> tuple[str, ...]:
        """The names of the state words."""
        return tuple(word.name for word in self.words if word.role is Role.STATE)

    @property
    def steps(self) -> Iterator[FloatStep]:
        """All steps in the order they are carried out."""
        for section in self.sections:
            yield from section.steps


def float_dc_gain(program: FloatProgram) -> fmpq | None:
    """The exact DC gain of the stored coefficients, in output units per input unit; None with a pole at z = 1."""
    gain = fmpq(1)
    for section in program.sections:
        denominator = section.a_at_one
        if denominator == 0:
            return None
        gain *= sum(section.exact_b, fmpq(0)) / denominator
    return gain


def _rational(value: float) -> fmpq:
    return fmpq(*value.as_integer_ratio())
