"""What single precision does to a filter: exact gain, a rigorous coefficient error, and labelled estimates."""

from collections.abc import Sequence
from math import inf, isfinite, lgamma, log, log2, pi, sqrt

import numpy as np
from attrs import frozen
from flint import arb, fmpq, fmpq_poly
from numpy.typing import NDArray

from afterkick.fixed.exact_response import exact_response
from afterkick.fixed.linear import RationalResponse
from afterkick.fixed.modal_sums import AbsoluteSum, ModalResponse, absolute_sum, difference, modal_response
from afterkick.fixed.program import Move, Role
from afterkick.floating.program import (
    FloatFlush,
    FloatProduct,
    FloatProgram,
    FloatProgramSection,
    FloatSum,
    float_dc_gain,
)
from afterkick.floating.rounding import LARGEST_SINGLE, MANTISSA_BITS, SMALLEST_EXPONENT, SMALLEST_NORMAL
from afterkick.floating.simulate import float_states
from afterkick.model.partial_fractions import Mode
from afterkick.numbers import fraction, mid_float, working_bits
from afterkick.sampling.sampled import Sampled

__all__ = ["Cost", "FloatEstimates", "Noise", "Tail", "float_estimates"]

RELATIVE_VARIANCE = 4.0 ** (1 - MANTISSA_BITS) * 3 / (8 * log(2)) / 12
"""Of one rounding, per square of the value rounded: errors uniform within half a last place, and the mantissa's
logarithm uniform, so that the mean of 1/m^2 over [1, 2) is 3 / (8 ln 2)."""
NEARLY = 0.95
"""Of the largest variance: of two frequencies that are as good, the higher one, whose roundings repeat less."""
DECADES = 6
PER_DECADE = 40
SHORT = 4096
"""Samples within which a tail is simulated too."""

Grid = NDArray[np.complex128]


@frozen
class Noise:
    """Estimate: white, independent rounding errors of all products and sums, for a sine of the promised peak.

    Too low by several times where roundings repeat: for an input that hardly changes, and where 1 + a1 + a2 keeps only
    a few bits more than are accepted.
    """

    rms: float
    """In output units, at the frequency where it is largest."""
    at_hz: float
    output_rms: float
    """Of the output itself at that frequency."""


@frozen
class Tail:
    """How long a state stays a normal number, at least 2^-126 in magnitude, after the input has gone to zero.

    Counts are estimates from the poles; None where the response does not decay, or ends by itself after finitely many
    samples.
    """

    after_impulse: int | None
    """Samples after a single sample of the promised peak."""
    after_step: int | None
    """Samples after the input went back to zero from the promised peak, long held."""
    simulated: int | None
    """``after_impulse`` as simulated; None where that would be long, or where small states are flushed."""
    sticks: bool | None
    """Whether states were simulated to stay at subnormal values for good; None where not simulated."""


@frozen
class Cost:
    """Of one sample."""

    products: int
    sums: int
    """Additions and subtractions of two numbers."""
    states: int
    instructions: int
    """Estimate for a core with single-precision hardware, one call a sample: one for each product and sum, one to load
    each coefficient, two for each state."""


@frozen(eq=False)
class FloatEstimates:
    """All that is known about one program."""

    dc_gain: fmpq | None
    """Of the stored coefficients, exact, in output units per input unit; None with a pole at z = 1."""
    dc_gain_relative: float | None
    """Its error against the exact sampled filter; None where either has no gain, or zero, at z = 1."""
    output_peak: float | None
    """Bound, in output units: the largest output for any input within the promised peak, roundings left out; None where
    it has no limit."""
    coefficient_error: float | None
    """Bound, in output units: the stored coefficients against the exact sampled filter, for every input within the
    promised peak, roundings left out; None where no bound exists."""
    flush_error: float | None
    """Bound, in output units, of what setting small states to zero adds; None where no bound exists."""
    largest: float | None
    """Estimate: the largest magnitude of any word for a sine of the promised peak; None where it has no limit."""
    noise: Noise | None
    """None where it has no limit."""
    tail: Tail
    cost: Cost

    @property
    def overflows(self) -> bool:
        """Estimate: whether some word would exceed the largest single."""
        return self.largest is not None and self.largest > LARGEST_SINGLE


def float_estimates(program: FloatProgram, sampled: Sampled) -> FloatEstimates:
    """The figures of ``program``, which was built from ``sampled``."""
    peak = float(fraction(program.input_format.peak))
    response = modal_response(_cascade(program.sections))
    kicks = [absolute_sum(modal_response(_from_rounding(program, k))) for k in range(len(program.sections))]
    sines = _Sines.of(program, peak)
    dc_gain = float_dc_gain(program)
    return FloatEstimates(
        dc_gain,
        _dc_gain_relative(dc_gain, sampled),
        _largest_sum(response, program.input_format.peak) if response.bounded else None,
        _coefficient_error(response, sampled, program.input_format.peak),
        _flush_error(program, kicks),
        sines.largest if response.bounded else None,
        sines.noise(kicks),
        _tail(program, response, peak),
        _cost(program),
    )


def _lowest_terms(top: fmpq_poly, bottom: fmpq_poly) -> RationalResponse:
    shared = top.gcd(bottom)
    top, bottom = top // shared, bottom // shared
    return RationalResponse(top / bottom[0], bottom / bottom[0])


def _cascade(sections: Sequence[FloatProgramSection], first_numerator: bool = True) -> RationalResponse:
    top, bottom = fmpq_poly([1]), fmpq_poly([1])
    for k, section in enumerate(sections):
        if k or first_numerator:
            top *= fmpq_poly(list(section.exact_b))
        bottom *= fmpq_poly(list(section.exact_a))
    return _lowest_terms(top, bottom)


def _from_rounding(program: FloatProgram, index: int) -> RationalResponse:
    """The output's response to an error in any sum of a section: each passes its denominator and the later sections."""
    return _cascade(program.sections[index:], first_numerator=False)


def _dc_gain_relative(dc_gain: fmpq | None, sampled: Sampled) -> float | None:
    if dc_gain is None or dc_gain == 0 or sampled.marginal:
        return None
    with working_bits(256):
        wanted = arb(1)
        for section in sampled.sections(192):
            wanted *= section.b_at_one / section.a_at_one
        if wanted.contains(0):
            return None
        error = dc_gain / wanted - 1
        return 0.0 if error.contains(0) else mid_float(error)


def _coefficient_error(response: ModalResponse, sampled: Sampled, peak: fmpq) -> float | None:
    """Peak times the absolute sum of the difference of the two pulse responses: it is attained, or nearly."""
    if not sampled.stable or not response.bounded:
        return None
    return _largest_sum(difference(response, exact_response(sampled, fmpq(1))), peak)


def _largest_sum(response: ModalResponse, peak: fmpq) -> float:
    """Peak times the absolute sum of a pulse response, rounded up."""
    return _up(absolute_sum(response).upper * _up(float(fraction(peak))))


def _up(value: float) -> float:
    return float(np.nextafter(value, inf))


def _flush_error(program: FloatProgram, kicks: Sequence[AbsoluteSum]) -> float | None:
    """A flush changes each state, and so the sum that made it, by less than the threshold."""
    if program.flush_below is None:
        return 0.0
    total = 0.0
    for section, kick in zip(program.sections, kicks, strict=True):
        flushes = sum(len(step.states) for step in section.steps if isinstance(step, FloatFlush))
        total = _up(total + _up(_up(flushes * kick.upper) * program.flush_below)) if flushes else total
    return total if isfinite(total) else None


@frozen(eq=False)
class _Sines:
    """The size of every rounding for sines of one amplitude, over a grid of frequencies."""

    frequencies_hz: NDArray[np.float64]
    squares: tuple[NDArray[np.float64], ...]
    """For each section, the mean square of all that it rounds, summed over its roundings."""
    output: NDArray[np.float64]
    """Amplitude of the output."""
    largest: float
    """Amplitude of the largest word at any frequency."""

    @classmethod
    def of(cls, program: FloatProgram, amplitude: float) -> "_Sines":
        cycles = _grid(program)
        late = np.exp(-2j * pi * cycles)
        words: dict[str, Grid] = {program.input: np.full(cycles.shape, amplitude, np.complex128)}
        with np.errstate(all="ignore"):
            for i in range(1, program.delay_samples + 1):
                words[f"x_{i}"] = words[program.input] * late**i
            squares, largest = [], amplitude
            for section in program.sections:
                rounded = _rounded_values(section, words, late)
                squares.append(sum((np.abs(value) ** 2 / 2 for value in rounded), np.zeros(cycles.shape)))
                largest = max([largest, *(float(np.max(np.abs(value))) for value in rounded)])
        rate_hz = float(fraction(program.rate_hz))
        return cls(cycles * rate_hz, tuple(squares), np.abs(words[program.output]), largest)

    def noise(self, kicks: Sequence[AbsoluteSum]) -> Noise | None:
        """The output's noise, each section's share through the sum of squares from there to the output."""
        if not all(isfinite(kick.squares) for kick in kicks):
            return None
        parts = [RELATIVE_VARIANCE * kick.squares * size for kick, size in zip(kicks, self.squares, strict=True)]
        variance = np.sum(parts, axis=0)
        worst = int(np.flatnonzero(variance >= NEARLY * np.max(variance))[-1])
        return Noise(
            sqrt(float(variance[worst])), float(self.frequencies_hz[worst]), float(self.output[worst]) / sqrt(2)
        )


def _grid(program: FloatProgram) -> NDArray[np.float64]:
    """Cycles a sample: six decades up to half the rate, and the angles of the poles."""
    count = DECADES * PER_DECADE
    found = [0.5 * 10 ** (-k / PER_DECADE) for k in range(1, count + 1)]
    for section in program.sections:
        _, a1, a2 = section.a
        if a1 * a1 < 4 * a2:
            found.append(float(np.arccos(-a1 / (2 * sqrt(a2)))) / (2 * pi))
    return np.array(sorted(found))


def _rounded_values(section: FloatProgramSection, words: dict[str, Grid], late: Grid) -> list[Grid]:
    """Phasors of everything that the section's steps round; enters the section's words."""
    b, a = section.b, section.a
    source = words[section.source]
    dest = source * (b[0] + late * (b[1] + late * b[2])) / (a[0] + late * (a[1] + late * a[2]))
    moved = {step.dest for step in section.steps if isinstance(step, Move)}
    states = [word.name for word in section.words if word.role is Role.STATE and word.name not in moved]
    second = b[2] * source - a[2] * dest
    first = b[1] * source - a[1] * dest + late * second
    words[section.dest] = dest
    words |= dict(zip(states, (late * first, late * second), strict=False))
    rounded = []
    for step in section.steps:
        if isinstance(step, FloatProduct):
            words[step.dest] = step.factor * words[step.word]
            if not log2(abs(step.factor)).is_integer():
                rounded.append(words[step.dest])
        elif isinstance(step, FloatSum):
            total = step.terms[0][0] * words[step.terms[0][1]]
            for sign, word in step.terms[1:]:
                total = total + sign * words[word]
                rounded.append(total)
    return rounded


def _tail(program: FloatProgram, response: ModalResponse, peak: float) -> Tail:
    """A section's states hold what its output will be, so the modes of the sections' outputs are theirs."""
    if not response.bounded:
        return Tail(None, None, None, None)
    outputs = [modal_response(_cascade(program.sections[:k])) for k in range(1, len(program.sections))]
    impulse, step = (
        max((_normal_samples(output.modes, peak, held) for output in (*outputs, response)), default=0) or None
        for held in (False, True)
    )
    if impulse is None or impulse > SHORT or program.flush_below is not None:
        return Tail(impulse, step, None, None)
    simulated, sticks = _simulated_tail(program, peak, 2 * impulse + 256)
    return Tail(impulse, step, simulated, sticks)


def _normal_samples(modes: Sequence[Mode], peak: float, held: bool) -> int:
    """Where the envelope of decaying modes goes below 2^-126; 0 where there are none."""
    terms = []
    for mode in modes:
        radius = float(abs(mode.pole).mid())
        lead = abs(1 - mode.pole) if held else 1
        for j, coefficient in enumerate(mode.coefficients):
            # what a held input leaves is the sum of the response from then on: c / (1 - p), to the leading order
            size = float((abs(coefficient) / lead).mid()) * peak * (1 if mode.real else 2)
            if size > 0 and radius > 0:
                terms.append((log2(size), log2(radius), j))

    def level(n: int) -> float:
        """log2 of the envelope's largest term."""
        return max(size + _log2_binomial(n - 1, j) + (n - 1 - j) * radius for size, radius, j in terms)

    if not terms:
        return 0
    high = 1 + max(j for _, _, j in terms)
    if level(high) < SMALLEST_EXPONENT:
        return high
    while level(high) >= SMALLEST_EXPONENT:
        high *= 2
    low = high // 2
    while high - low > 1:
        middle = (low + high) // 2
        low, high = (middle, high) if level(middle) >= SMALLEST_EXPONENT else (low, middle)
    return high


def _log2_binomial(n: int, k: int) -> float:
    """log2 of n over k."""
    return (lgamma(n + 1) - lgamma(k + 1) - lgamma(n - k + 1)) / log(2) if k else 0.0


def _simulated_tail(program: FloatProgram, peak: float, length: int) -> tuple[int, bool]:
    """Samples until every state has gone below 2^-126 for good, and whether some then stay above zero."""
    history = np.abs(float_states(program, [peak] + [0.0] * (length - 1)))
    normal = np.flatnonzero((history >= SMALLEST_NORMAL).any(axis=1))
    return int(normal[-1]) + 1 if normal.size else 0, bool(history[-1].any())


def _cost(program: FloatProgram) -> Cost:
    products = sum(isinstance(step, FloatProduct) for step in program.steps)
    sums = sum(len(step.terms) - 1 for step in program.steps if isinstance(step, FloatSum))
    states = len(program.states)
    return Cost(products, sums, states, 2 * products + sums + 2 * states)
