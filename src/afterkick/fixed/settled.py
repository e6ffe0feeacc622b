"""Where the output settles after a step: what is proved, and what the integers do.

Long after the input has become a constant code, a proved program's output is the DC gain of its integers times that
code plus the responses to the roundings, which stay within known limits for ever, limit cycles included.  The output is
an integer, so that what is left of those limits depends on the amplitude.
"""

from collections.abc import Sequence
from fractions import Fraction
from math import ceil, floor

import numpy as np
from attrs import frozen
from flint import fmpq

from afterkick.fixed.kept import exact_dc_gain
from afterkick.fixed.linear import LinearSystem
from afterkick.fixed.program import Program, Role, Sum
from afterkick.fixed.quantise import PROBE_BITS
from afterkick.fixed.repetition import Repetition, until_repeated
from afterkick.numbers import ball, fraction, mid_float, nearest_float, working_bits
from afterkick.sampling.sampled import Sampled

__all__ = ["StepOffset", "settled_offsets", "step_codes"]

PARTS = (1, 2, 8, 64)
"""The steps go to these parts of the peak."""
WORK = 1_000_000
"""Terms and moves that the simulation of one step may take, some hundredths of a second: about 20,000 samples of four
sections."""
TIME_CONSTANTS = 100
"""And so many of the slowest mode are enough: full scale fades within 25, what comes after them is a limit cycle."""
LEAST_SAMPLES = 2000


@frozen
class StepOffset:
    """One step from a reset.  Offsets are output counts beyond the DC gain of the integers times ``code``."""

    code: int
    """The input code that the step goes to."""
    wanted: float
    """The DC gain of the integers times ``code``, in output counts."""
    from_coefficients: float
    """How far that is from what the exact filter gives, in output counts; good to double precision."""
    lowest: float
    highest: float
    """Bounds of the offset at every sample long after the step, whatever came before it."""
    simulated: Repetition
    """What the integers did; only with a period is it certain that the step had settled."""
    simulated_lowest: float
    simulated_highest: float
    """Of the offset, then."""

    @property
    def largest(self) -> float:
        """The bound of the offset's magnitude."""
        return max(abs(self.lowest), abs(self.highest))


def settled_offsets(
    program: Program, sampled: Sampled, rounding: tuple[float, float], codes: Sequence[int], work: int = WORK
) -> tuple[StepOffset, ...]:
    """Of a step to each of ``codes``, in a program of which it is proved that no word overflows.

    ``rounding`` is the least and the most that all roundings together add to the output.  Nothing is defined with a
    pole at z = 1, or with a clamp: there the result is empty.
    """
    gain = LinearSystem(program).responses(None)[program.output].total
    if gain is None or any(isinstance(step, Sum) and step.limits is not None for step in program.steps):
        return ()
    beyond = _beyond_exact(gain, program, sampled)
    per_sample = sum(len(step.terms) if isinstance(step, Sum) else 1 for step in program.steps)
    most = min(work // per_sample, _long_enough(program))
    repeated = until_repeated(program)
    return tuple(_offset(code, fraction(gain) * code, beyond * code, rounding, repeated(code, most)) for code in codes)


def _offset(
    code: int, wanted: Fraction, from_coefficients: float, rounding: tuple[float, float], seen: Repetition
) -> StepOffset:
    return StepOffset(
        code,
        float(wanted),
        from_coefficients + 0.0,  # no negative zero
        float(ceil(wanted + Fraction(rounding[0])) - wanted),
        float(floor(wanted + Fraction(rounding[1])) - wanted),
        seen,
        float(seen.lowest - wanted),
        float(seen.highest - wanted),
    )


def _long_enough(program: Program) -> int:
    """Samples."""
    radius = max(float(np.max(np.abs(np.roots(section.a)))) for section in program.sections)
    fading = TIME_CONSTANTS / max(1 - radius, 1e-9)
    return max(LEAST_SAMPLES, round(fading)) + sum(word.role is Role.STATE for word in program.words)


def step_codes(program: Program, peak_code: int) -> tuple[int, ...]:
    """The promised peak and parts of it, one count, and the negative peak."""
    highest = min(peak_code, program.word(program.input).highest)
    codes = (*(highest // part for part in PARTS), 1, -highest)
    return tuple(dict.fromkeys(code for code in codes if code))


def _beyond_exact(gain: fmpq, program: Program, sampled: Sampled) -> float:
    """The DC gain of the integers less that of the exact filter, in output codes per input code."""
    scale = program.input_format.full_scale / program.output_format.full_scale
    exact = exact_dc_gain(sampled)
    if exact is not None:
        return nearest_float(gain - exact * scale)
    with working_bits(PROBE_BITS):
        product = ball(scale)
        for section in sampled.sections(PROBE_BITS):
            product *= section.b_at_one / section.a_at_one
        return mid_float(gain - product)
