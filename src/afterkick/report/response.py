"""The impulse response as numbers, for ``kick``."""

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

__all__ = ["Kick", "kick"]


@frozen(eq=False)
class Kick:
    """Columns over the sample index n; the three responses in output units per input unit and second."""

    amplitude_counts: int
    """The input code of the integer run's single sample."""
    dirac: float
    """Weight of the Dirac part, which is in none of the columns."""
    n: Indices
    t: Floats
    analytic: Floats
    """h(nT), the mean of both sides at a jump."""
    sampled: Floats
    """h_d[n] / T."""
    integer: Floats
    """The integer filter's answer to the single sample, scaled back."""
    counts: Indices
    """The same in output codes."""
    improper: bool
    """Whether h also holds derivatives of the Dirac impulse, which are in none of the columns."""
    clipped: int
    """How many output codes are the lowest or highest of the word."""


def kick(model: Model, sampled: Sampled, program: Program, samples: int, amplitude: fmpq) -> Kick:
    """``samples`` rows; ``amplitude`` in input units is what the integer filter is kicked with.

    :raises Refused: an amplitude that is not at least one input count and within the input's range.
    """
    scale = 1 << (program.data_bits - 1)
    code = min(round(fraction(amplitude / program.input_format.full_scale * scale)), scale - 1)
    if code < 1 or amplitude > program.input_format.full_scale:
        full_scale = program.input_format.full_scale
        raise Refused(
            Problem(
                "--amplitude",
                f"{float(fraction(amplitude)):.6g}",
                f"from one count ({float(fraction(full_scale / scale)):.6g}) to full scale"
                f" ({float(fraction(full_scale)):.6g}), in input units",
                "leave it out: the promised peak is used",
            )
        )
    indices = np.arange(samples, dtype=np.int64)
    try:
        analytic, discrete = _curves(model, sampled, indices, exact=False)
    except Cancelling:
        analytic, discrete = _curves(model, sampled, indices, exact=True)
    stimulus = np.zeros(samples, dtype=np.int64)
    stimulus[0] = code
    counts = simulate(program, stimulus)
    output = program.word(program.output)
    period = float(fraction(sampled.period_s))
    dirac = mid_float(model.feedthrough())
    unit = nearest_float(program.output_format.full_scale / program.input_format.full_scale / code)
    late = sampled.delay_samples
    if sampled.fraction_s == 0 and late < samples:
        discrete[late] -= dirac
    with np.errstate(over="ignore", invalid="ignore"):
        integer = counts.astype(np.float64) * unit
        if sampled.fraction_s == 0 and late < samples:
            integer[late] -= dirac
    return Kick(
        code,
        dirac,
        indices,
        indices.astype(np.float64) * period,
        analytic,
        discrete / period,
        integer / period,
        counts,
        model.relative_degree < 0,
        int(np.count_nonzero((counts == output.lowest) | (counts == output.highest))),
    )


def _curves(model: Model, sampled: Sampled, indices: Indices, exact: bool) -> tuple[Floats, Floats]:
    late = indices - sampled.delay_samples
    times = [int(n) * sampled.period_s - model.dead_time_s for n in indices]
    analytic = analytic_curve(model, 0, times, exact)
    analytic = np.where(np.array([time == 0 for time in times]), analytic / 2, analytic)
    pulse = sampled_curve(sampled, 0, np.maximum(late, 0), exact)
    return analytic, np.where(late < 0, 0.0, pulse)
