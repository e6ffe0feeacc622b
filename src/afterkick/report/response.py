"""The impulse response as numbers, for ``kick``."""

from typing import TYPE_CHECKING, TypeAlias

import numpy as np
from attrs import frozen
from flint import fmpq

from afterkick.errors import Problem, Refused
from afterkick.fixed.program import Program
from afterkick.fixed.simulate import simulate
from afterkick.model.model import Model
from afterkick.numbers import fraction, mid_float, nearest_float
from afterkick.sampling.curves import Cancelling, Floats, Indices, analytic_curve, sampled_curve
from afterkick.sampling.sampled import Sampled

if TYPE_CHECKING:
    from afterkick.floating import FloatProgram

__all__ = ["Kick", "kick"]


@frozen(eq=False)
class Kick:
    """Columns over the sample index n; the three responses in output units per input unit and second."""

    amplitude: int | float
    """The one sample that the shipped filter was given: a code, or for singles a value in input units."""
    dirac: float
    """Weight of the Dirac part, which is in none of the columns."""
    n: Indices
    t: Floats
    analytic: Floats
    """h(nT), the mean of both sides at a jump."""
    sampled: Floats
    """h_d[n] / T."""
    shipped: Floats
    """The shipped filter's answer to that sample, scaled back."""
    outputs: Indices | Floats
    """The same as it comes out: codes, or singles in output units."""
    improper: bool
    """Whether h also holds derivatives of the Dirac impulse, which are in none of the columns."""
    clipped: int
    """How many output codes are the lowest or highest of the word or its clamp; 0 for singles."""


def kick(model: Model, sampled: Sampled, program: "Program | FloatProgram", samples: int, amplitude: fmpq) -> Kick:
    """``samples`` rows; ``amplitude`` in input units is what the shipped filter is kicked with.

    :raises Refused: an amplitude that is not within the range that the program takes, or below its resolution.
    """
    given, outputs, unit, clipped = (
        _integer_answer(program, samples, amplitude)
        if isinstance(program, Program)
        else _single_answer(program, samples, amplitude)
    )
    indices = np.arange(samples, dtype=np.int64)
    try:
        analytic, discrete = _curves(model, sampled, indices, exact=False)
    except Cancelling:
        analytic, discrete = _curves(model, sampled, indices, exact=True)
    period = float(fraction(sampled.period_s))
    dirac = mid_float(model.feedthrough())
    late = sampled.delay_samples
    if sampled.fraction_s == 0 and late < samples:
        discrete[late] -= dirac
    with np.errstate(over="ignore", invalid="ignore"):
        shipped = outputs.astype(np.float64) * unit
        if sampled.fraction_s == 0 and late < samples:
            shipped[late] -= dirac
    return Kick(
        given,
        dirac,
        indices,
        indices.astype(np.float64) * period,
        analytic,
        discrete / period,
        shipped / period,
        outputs,
        model.relative_degree < 0,
        clipped,
    )


Answer: TypeAlias = tuple[int | float, Indices | Floats, float, int]
"""What was given, what came out, the output units per input unit that 1 of it stands for, how many are clipped."""


def _integer_answer(program: Program, samples: int, amplitude: fmpq) -> Answer:
    scale = 1 << (program.data_bits - 1)
    full_scale, peak = program.input_format.full_scale, program.input_format.peak
    code = min(round(fraction(amplitude / full_scale * scale)), scale - 1)
    relaxed = program.proof is not None
    most, name = (peak, "the promised peak of a relaxed filter") if relaxed else (full_scale, "full scale")
    if code < 1 or amplitude > most:
        raise Refused(
            Problem(
                "--amplitude",
                f"{float(fraction(amplitude)):.6g}",
                f"from one count ({float(fraction(full_scale / scale)):.6g}) to {name}"
                f" ({float(fraction(most)):.6g}), in input units",
                "leave it out: the promised peak is used",
            )
        )
    stimulus = np.zeros(samples, dtype=np.int64)
    stimulus[0] = code
    counts = simulate(program, stimulus)
    clipped = int(np.count_nonzero(np.isin(counts, program.output_ends)))
    return code, counts, nearest_float(program.output_format.full_scale / full_scale / code), clipped


def _single_answer(program: "FloatProgram", samples: int, amplitude: fmpq) -> Answer:
    from afterkick.floating import simulate_float  # fixed point pays nothing for it
    from afterkick.floating.rounding import LARGEST_SINGLE, SMALLEST_NORMAL

    if not SMALLEST_NORMAL <= nearest_float(amplitude) <= LARGEST_SINGLE:
        found, accepted = f"{float(fraction(amplitude)):.6g}", f"from {SMALLEST_NORMAL:.6g} to {LARGEST_SINGLE:.6g}"
        remedy = "leave it out: the promised peak is used"
        raise Refused(Problem("--amplitude", found, f"{accepted}, in input units", remedy))
    stimulus = np.zeros(samples, np.float32)
    stimulus[0] = nearest_float(amplitude)
    value = float(stimulus[0])
    return value, simulate_float(program, stimulus).astype(np.float64), 1 / value, 0


def _curves(model: Model, sampled: Sampled, indices: Indices, exact: bool) -> tuple[Floats, Floats]:
    late = indices - sampled.delay_samples
    times = [int(n) * sampled.period_s - model.dead_time_s for n in indices]
    analytic = analytic_curve(model, 0, times, exact)
    analytic = np.where(np.array([time == 0 for time in times]), analytic / 2, analytic)
    pulse = sampled_curve(sampled, 0, np.maximum(late, 0), exact)
    return analytic, np.where(late < 0, 0.0, pulse)
