"""What a Program's output can be off by, for every input within the promised peak: rigorous, from exact responses.

Where the worst case of every word fits it, the bounds hold for ever.  If it does not, nothing is proved, and the result
says which word.  Of a filter that integrates they hold as long as no clamp acts, with the part that grows apart.
"""

from functools import cached_property
from itertools import count
from math import floor, inf, isfinite

import numpy as np
from attrs import frozen
from numpy.typing import NDArray

from afterkick.fixed.exact_response import exact_response
from afterkick.fixed.linear import RationalResponse
from afterkick.fixed.modal_sums import (
    ModalResponse,
    absolute_sum,
    difference,
    modal_response,
    values,
    without_constant,
)
from afterkick.fixed.narrow import rounding_offset, shift_right
from afterkick.fixed.program import Program, Sum
from afterkick.fixed.simulate import simulate
from afterkick.fixed.worst_case import SumRange, WordRange, WorstCase, rounded_up
from afterkick.numbers import fraction
from afterkick.sampling.sampled import Sampled

__all__ = ["Attained", "Bounds", "Integration", "OutputError", "bounds", "worst_input"]

ATTAINING_SAMPLES = 8192
"""Of the worst input that is tried on the simulator."""
LIFETIME_SAMPLES = 2.0**64
"""A growth that does not add up to NOTHING counts in so many samples is counted as that: more than half a million years
at a million samples a second."""
NOTHING = 2.0**-20


@frozen
class OutputError:
    """Bounds of the output's distance, in output counts, for every input within the promised peak.

    With a clamp they hold as long as it does not act.
    """

    coefficients: float
    """The rounded coefficients against the exact sampled filter."""
    rounding: float
    """The roundings of all sums."""
    sampling: float
    """The sampled filter against the continuous model, at the samples, for staircase inputs."""
    growth: float = 0.0
    """What a filter that integrates adds for each sample that the worst input lasts, from all three causes."""

    @property
    def total(self) -> float:
        """Against the continuous model, for staircase inputs; without what grows."""
        return rounded_up(self.coefficients + self.rounding + self.sampling)


@frozen
class Integration:
    """How a filter integrates, by one state that a clamp holds."""

    word: str
    lowest: int
    """What the clamp lets through, in output counts."""
    highest: int
    smallest_code: int
    """The smallest constant input, of either sign, that is not lost."""
    per_sample: float
    """Output counts that a constant input of one code adds in each sample."""


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
    sums: tuple[SumRange, ...]
    """One for each computed word; words without a bound are taken as whole."""
    unbounded: str
    """Why no bound exists; empty where one does."""
    output: OutputError | None
    """None where nothing is proved."""
    dead_band: float | None
    """Bound of the output, in counts, long after the input has gone to zero; None where nothing is proved.

    With a filter that integrates, of the output's distance from the value that is held then.
    """
    rounding: tuple[float, float] | None
    """The least and the most that all roundings together add to the output; None where nothing is proved, and with a
    filter that integrates."""
    integration: Integration | None
    """How the filter integrates; None where it does not, or not by one state that a clamp holds."""
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

    @property
    def clamped(self) -> tuple[WordRange, ...]:
        """The words that a clamp holds."""
        return tuple(word for word in self.words if word.clamped)

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
    unbounded = _unbounded(worst.ranges) if sampled.stable or worst.held else _not_stable(sampled)
    proved = not unbounded and all(word.fits for word in worst.ranges)
    error = _output_error(worst, sampled, held) if proved else None
    if error is not None and not isfinite(error.total):
        proved, error, unbounded = False, None, "unbounded: the responses are beyond the range of double precision"
    to_output = worst.to_input[program.output]
    return Bounds(
        worst.peak_code,
        worst.ranges,
        worst.sums,
        unbounded,
        error,
        float(floor(error.rounding)) if error is not None else None,
        worst.rounding_span if error is not None and not worst.held else None,
        _integration(worst) if proved else None,
        worst.noise_rms,
        _peak_reached(program, to_output, output, worst.peak_code) if proved and not worst.held else None,
    )


def _not_stable(sampled: Sampled) -> str:
    what = "an integrator or undamped mode never forgets" if sampled.marginal else "the filter is unstable"
    return f"unbounded: {what}, so that only its word limits the output"


def _unbounded(words: tuple[WordRange, ...]) -> str:
    names = [word.word for word in words if word.highest == inf]
    if not names:
        return ""
    return f"unbounded: the response of {', '.join(names)} does not decay, so that only the word limits it"


def _output_error(worst: WorstCase, sampled: Sampled, held: Sampled | None) -> OutputError:
    program, peak = worst.program, worst.peak_code
    scale = program.input_format.full_scale / program.output_format.full_scale
    response = worst.closed_to_input[program.output]
    late = RationalResponse(response.numerator.right_shift(program.delay_samples), response.denominator)
    exact = exact_response(sampled, scale)
    coefficients = _with_growth(difference(modal_response(late), exact), peak)
    sampling = (0.0, 0.0) if held is None else _with_growth(difference(exact, exact_response(held, scale)), peak)
    rounding = _rounding_with_growth(worst) if worst.held else (max(worst.from_rounding(program.output)), 0.0)
    growth = rounded_up(rounded_up(coefficients[1] + rounding[1]) + sampling[1])
    for_ever = rounded_up(growth * LIFETIME_SAMPLES)
    if for_ever < NOTHING:
        return OutputError(rounded_up(coefficients[0] + for_ever), rounding[0], sampling[0])
    return OutputError(coefficients[0], rounding[0], sampling[0], growth)


def _with_growth(response: ModalResponse, size: float) -> tuple[float, float]:
    """``size`` times the absolute sum of what decays, and times what stays."""
    rest, constant = without_constant(response)
    return rounded_up(size * absolute_sum(rest).upper), rounded_up(size * constant)


def _rounding_with_growth(worst: WorstCase) -> tuple[float, float]:
    """Of the output while no clamp acts: what roundings add at most at any time, and for each sample."""
    name = worst.program.output
    total, growth = 0.0, 0.0
    for source, responses in worst.closed_to_rounding.items():
        response = responses[name]
        if response.numerator.is_zero():
            continue
        size = float(fraction(max(abs(source.low), abs(source.high))))
        found = _with_growth(modal_response(response), size)
        total, growth = rounded_up(total + found[0]), rounded_up(growth + found[1])
    return total, growth


def _integration(worst: WorstCase) -> Integration | None:
    """The state that is held, the sum that drives it, and what comes out of it."""
    if len(worst.held) != 1:
        return None
    program = worst.program
    ((state, limits),) = worst.held.items()
    sums = {step.dest: step for step in program.steps if isinstance(step, Sum)}
    driving = [sums[term.word] for term in sums[state].terms if term.word != state and term.word in sums]
    if len(driving) != 1 or any(term.word in sums for term in driving[0].terms):
        return None
    step = driving[0]
    factor = abs(sum(term.factor for term in step.terms))
    per_sample = without_constant(modal_response(worst.closed_to_input[program.output]))[1]
    if factor == 0:
        return None
    smallest = 1
    if step.residue is None and step.right_shift:
        nothing = rounding_offset(step.right_shift, step.rounding) or 1 << step.right_shift
        smallest = next(
            code
            for code in count(max(nothing // factor, 1))
            if all(shift_right(sign * code * factor, step.right_shift, step.rounding) for sign in (1, -1))
        )
    fraction_bits = program.word(state).fraction_bits - program.word(program.output).fraction_bits
    return Integration(state, limits[0] >> fraction_bits, limits[1] >> fraction_bits, smallest, per_sample)


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
