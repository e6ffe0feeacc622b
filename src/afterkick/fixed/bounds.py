"""What a Program can do at worst, for every input within the promised peak: rigorous, from exact linear responses.

While no word has overflowed, each word is the exact linear response to the input plus the responses to the roundings,
whose sizes are known.  If the sum of the worst of all of these fits every word, no word ever overflows; so the bounds
hold for ever, by induction over the samples.  If it does not fit, nothing is proved, and the result says which word.
"""

from functools import cached_property
from math import ceil, floor, inf, sqrt

import numpy as np
from attrs import frozen
from numpy.typing import NDArray

from afterkick.fixed.exact_response import exact_response
from afterkick.fixed.linear import LinearSystem, RationalResponse, RoundingSource
from afterkick.fixed.modal_sums import AbsoluteSum, absolute_sum, difference, modal_response, values
from afterkick.fixed.program import Program
from afterkick.fixed.simulate import simulate
from afterkick.numbers import fraction
from afterkick.sampling.sampled import Sampled

__all__ = ["Attained", "Bounds", "OutputError", "WordRange", "WorstCase", "bounds", "worst_input"]

ATTAINING_SAMPLES = 8192
"""Of the worst input that is tried on the simulator."""


@frozen
class WordRange:
    """What a computed word can hold, in its own last places; both limits are bounds."""

    word: str
    lowest: float
    highest: float
    from_input: float
    """Of the magnitude, the input's part."""
    from_rounding: float
    capacity_low: int
    capacity_high: int

    @property
    def filling(self) -> float:
        """The part of the word that the range takes, at most 1 where it fits."""
        return max(self.highest / self.capacity_high, self.lowest / self.capacity_low)

    @property
    def fits(self) -> bool:
        """Whether the word never overflows, if no other does."""
        return self.capacity_low <= self.lowest and self.highest <= self.capacity_high


@frozen
class OutputError:
    """Bounds of the output's distance, in output counts, for every input within the promised peak."""

    coefficients: float
    """The rounded coefficients against the exact sampled filter."""
    rounding: float
    """The roundings of all sums."""
    sampling: float
    """The sampled filter against the continuous model, at the samples, for staircase inputs."""

    @property
    def total(self) -> float:
        """Against the continuous model, for staircase inputs."""
        return _up(self.coefficients + self.rounding + self.sampling)


@frozen
class Attained:
    """How near a simulated input comes to a bound."""

    bound: float
    simulated: float

    @property
    def ratio(self) -> float:
        """simulated / bound."""
        return self.simulated / self.bound if self.bound else 1.0


@frozen(eq=False)
class Bounds:
    """All bounds of one program."""

    peak_code: int
    """The largest input magnitude, in codes."""
    words: tuple[WordRange, ...]
    unbounded: str
    """Why no bound exists; empty where one does."""
    output: OutputError | None
    """None where nothing is proved."""
    dead_band: float | None
    """Bound of the output, in counts, long after the input has gone to zero; None where nothing is proved."""
    noise_rms: float | None
    """Estimate: white rounding errors, uniformly distributed, in counts; None where it has no limit."""
    peak_reached: Attained | None
    """The output word's range against the input that drives it there."""

    @property
    def overflowing(self) -> tuple[WordRange, ...]:
        """The words that may overflow."""
        return tuple(word for word in self.words if not word.fits)

    @property
    def why_not(self) -> str:
        """Why nothing is proved; empty where it is."""
        if self.unbounded:
            return self.unbounded
        listed = ", ".join(f"{word.word} (up to {100 * word.filling:.4g} % of it)" for word in self.overflowing)
        return f"words that may overflow: {listed}" if listed else ""

    @cached_property
    def proved(self) -> bool:
        """Whether no word ever overflows."""
        return not self.unbounded and not self.overflowing


def bounds(program: Program, sampled: Sampled, held: Sampled | None) -> Bounds:
    """The bounds of ``program`` against the exact ``sampled`` filter.

    ``held`` is the zero-order-hold sampling of the same model, what the continuous model does to a staircase; None
    where the filter is that already.
    """
    worst = WorstCase(program)
    output = next(word for word in worst.ranges if word.word == program.output)
    to_output = worst.to_input[program.output]
    unbounded = _unbounded(worst.ranges) if sampled.stable else _not_stable(sampled)
    proved = not unbounded and all(word.fits for word in worst.ranges)
    return Bounds(
        worst.peak_code,
        worst.ranges,
        unbounded,
        _output_error(program, sampled, held, to_output, output, worst.peak_code) if proved else None,
        float(floor(output.from_rounding)) if proved else None,
        worst.noise_rms,
        _peak_reached(program, to_output, output, worst.peak_code) if proved else None,
    )


@frozen(eq=False)
class WorstCase:
    """The linear responses of a program and the ranges they allow, as long as no word overflows."""

    program: Program

    @cached_property
    def peak_code(self) -> int:
        """The promised peak in codes, rounded up; full scale is the code -2^(bits-1)."""
        program = self.program
        scale = 1 << (program.data_bits - 1)
        return min(ceil(fraction(program.input_format.peak / program.input_format.full_scale * scale)), scale)

    @cached_property
    def system(self) -> LinearSystem:
        """The exact linear system."""
        return LinearSystem(self.program)

    @cached_property
    def to_input(self) -> dict[str, RationalResponse]:
        """Each computed word's response to the input."""
        return self.system.responses(None)

    @cached_property
    def to_rounding(self) -> dict[RoundingSource, dict[str, RationalResponse]]:
        """Each computed word's response to each rounding."""
        return {source: self.system.responses(source.dest) for source in self.system.sources}

    @cached_property
    def ranges(self) -> tuple[WordRange, ...]:
        """Of every computed word."""
        return tuple(self._range(name) for name in self.system.computed)

    @cached_property
    def noise_rms(self) -> float | None:
        """Estimate, of the output: white, uniformly distributed, independent rounding errors."""
        variance = sum(self._sum(responses[self.program.output]).squares for responses in self.to_rounding.values())
        return None if variance == inf else sqrt(variance / 12)

    def _range(self, name: str) -> WordRange:
        word = self.program.word(name)
        reach = _up(self.peak_code * self._sum(self.to_input[name]).upper)
        up = down = 0.0
        for source, responses in self.to_rounding.items():
            response = responses[name]
            if response.numerator.is_zero():
                continue
            size = float(fraction(source.radius)) * self._sum(response).upper
            total = response.total
            shift = 0.0 if total is None else float(fraction(source.mean * total))
            # the two may cancel: what their conversions and products rounded is far below this part of either
            slack = (size + abs(shift)) * 2.0**-48
            up = _up(up + _up(size + shift + slack))
            down = _up(down + _up(size - shift + slack))
        return WordRange(name, _down(-reach - down), _up(reach + up), reach, max(up, down), word.lowest, word.highest)

    @cached_property
    def _sums(self) -> dict[RationalResponse, AbsoluteSum]:
        return {}

    def _sum(self, response: RationalResponse) -> AbsoluteSum:
        if response not in self._sums:
            self._sums[response] = absolute_sum(modal_response(response))
        return self._sums[response]


def _up(value: float) -> float:
    return float(np.nextafter(np.nextafter(value, inf), inf))


def _down(value: float) -> float:
    return -_up(-value)


def _not_stable(sampled: Sampled) -> str:
    what = "an integrator or undamped mode never forgets" if sampled.marginal else "the filter is unstable"
    return f"unbounded: {what}, so that only its word limits the output"


def _unbounded(words: tuple[WordRange, ...]) -> str:
    names = [word.word for word in words if word.highest == inf]
    if not names:
        return ""
    return f"unbounded: the response of {', '.join(names)} does not decay, so that only the word limits it"


def _output_error(
    program: Program,
    sampled: Sampled,
    held: Sampled | None,
    response: RationalResponse,
    output: WordRange,
    peak: int,
) -> OutputError:
    scale = program.input_format.full_scale / program.output_format.full_scale
    late = RationalResponse(response.numerator.right_shift(program.delay_samples), response.denominator)
    exact = exact_response(sampled, scale)
    coefficients = peak * absolute_sum(difference(modal_response(late), exact)).upper
    sampling = 0.0
    if held is not None:
        sampling = _up(peak * absolute_sum(difference(exact, exact_response(held, scale))).upper)
    return OutputError(_up(coefficients), output.from_rounding, sampling)


def _peak_reached(program: Program, response: RationalResponse, output: WordRange, peak: int) -> Attained:
    """The sign pattern of the reversed response drives the output to its bound, up to what the roundings add."""
    codes = worst_input(program, response, peak)
    reached = int(np.max(np.abs(simulate(program, codes))))
    return Attained(max(output.highest, -output.lowest), float(reached))


def worst_input(program: Program, response: RationalResponse, peak: int) -> NDArray[np.int64]:
    """The input, at most ``peak`` in magnitude, that drives the last output sample as far up as any can."""
    shape = values(modal_response(response), ATTAINING_SAMPLES)[::-1]
    word = program.word(program.input)
    codes = np.where(shape < 0, -peak, min(peak, word.highest)).astype(np.int64)
    return np.clip(codes, word.lowest, word.highest)
