"""How far the sampled filter is from the continuous model: impulse, step, staircase inputs, frequency, modes.

All figures are float64 estimates over a stated horizon.  The convention for impulse responses is h_d[n]/T against
h(nT), the Dirac part m0 apart, and the mean of both sides where h jumps at t = 0.  Figures are relative to the analytic
response: the peak to its largest magnitude, r.m.s. to its r.m.s., the area to its absolute area.
"""

from math import atan2, ceil, inf, isfinite, log, pi

import numpy as np
from attrs import frozen
from flint import acb, arb, fmpq

from afterkick.design.schema import Sampling
from afterkick.numbers import fraction, mid_float, working_bits
from afterkick.sampling.curves import (
    Cancelling,
    Floats,
    Grid,
    Indices,
    analytic_curve,
    analytic_floats,
    grid,
    sampled_curve,
)
from afterkick.sampling.sample import sample
from afterkick.sampling.sampled import Sampled

__all__ = [
    "CONVENTION",
    "BandError",
    "ImpulseError",
    "ModeShift",
    "ResponseErrors",
    "StepError",
    "response_errors",
]

CONVENTION = "h_d[n]/T against h(nT), Dirac part apart, mean of both sides at a jump; relative to the analytic response"

_POINTS = 16384
_EXACT_POINTS = 400
_ALIGNING_POINTS = 2048
_ALIGNING_EXACT_POINTS = 64
_LONGEST_HORIZON = 1 << 24
_FRACTIONS = 8
"""Instants looked at within each sampling interval."""


@frozen
class ImpulseError:
    """Relative figures; the aligned ones with the analytic response ``delay_samples`` late, which minimises r.m.s.

    None where there is nothing to relate to (the analytic response is zero at every sample) or no finite number.
    """

    peak: float | None
    rms: float | None
    area: float | None
    delay_samples: float
    peak_aligned: float | None
    rms_aligned: float | None


@frozen
class StepError:
    """Relative to the largest magnitude of the analytic step response over the horizon; None as above."""

    peak: float | None
    between_samples: float | None
    """Largest difference of the continuous response from the held output, anywhere in the sampling intervals."""


@frozen
class BandError:
    """The largest differences of the frequency response up to ``up_to_hz``; None where no frequency has one."""

    up_to_hz: float
    magnitude_db: float | None
    magnitude_at_hz: float | None
    phase_deg: float | None
    phase_at_hz: float | None


@frozen
class ModeShift:
    """One mode of the model and what sampling makes of it.  A decay is the rate of e^(-decay t), per second."""

    analog_hz: float
    analog_decay_per_s: float
    cycles_per_sample: float
    sampled_hz: float
    sampled_decay_per_s: float


@frozen
class ResponseErrors:
    """Everything ``check`` says about sampling."""

    horizon_samples: int
    impulse: ImpulseError | None
    """None for an improper model, whose response holds derivatives of the Dirac impulse."""
    step: StepError | None
    staircase_at_samples: float | None
    """Worst difference at the samples per unit of a staircase input; None where no bound exists (integrators, improper
    models)."""
    staircase_between_samples: float | None
    band: BandError
    dc_gain_relative: float | None
    """H_d(1)/H(0) - 1; None without a finite gain other than zero at 0 Hz."""
    growth_relative: float | None
    """With integrators: the error of the slope (or higher growth) of the response; None without."""
    modes: tuple[ModeShift, ...]
    """One a mode; empty for rounded coefficients, whose poles are images of nothing."""


def response_errors(sampled: Sampled, band_hz: fmpq | None = None) -> ResponseErrors:
    """The errors of a sampled filter; ``band_hz`` defaults to a tenth of the rate."""
    horizon = _horizon_samples(sampled)
    return ResponseErrors(
        horizon,
        *_time_errors(sampled, horizon),
        _band_error(sampled, band_hz if band_hz is not None else sampled.rate_hz / 10),
        *_gain_errors(sampled),
        _mode_shifts(sampled),
    )


_TimeErrors = tuple[ImpulseError | None, StepError | None, float | None, float | None]
"""Impulse, step, and the worst difference for staircase inputs at and between the samples."""


def _time_errors(sampled: Sampled, horizon: int) -> _TimeErrors:
    if sampled.model.relative_degree < 0:
        return None, None, None, None
    with np.errstate(over="ignore", invalid="ignore", under="ignore"):
        try:
            return _compared(_Comparison.of(sampled, grid(horizon, _POINTS), exact=False))
        except Cancelling:
            return _compared(_Comparison.of(sampled, grid(horizon, _EXACT_POINTS), exact=True))


def _compared(comparison: "_Comparison") -> _TimeErrors:
    impulse, step = comparison.impulse(), comparison.step()
    if not (comparison.sampled.stable and comparison.sampled.model.stability == "stable"):
        return impulse, step, None, None
    between = _finite(comparison.staircase_between_samples())
    return impulse, step, _finite(comparison.staircase_at_samples()), between


def _finite(value: float) -> float | None:
    return value if isfinite(value) else None


def _relative(value: float, scale: float) -> float | None:
    return _finite(value / scale) if scale else None


def _horizon_samples(sampled: Sampled) -> int:
    """Until a decaying response is below 1e-8 of its start; a few periods or e-foldings of what does not decay."""
    longest = 0.0
    for root, times in sampled.model.poles.items():
        value = root.evaluate()
        decay, turn = -mid_float(value.real), abs(mid_float(value.imag))
        if sampled.model.signs[root] < 0:
            longest = max(longest, (18.4 + 4.0 * (times - 1)) / decay)
        elif sampled.model.signs[root] > 0:
            longest = max(longest, 5.0 / -decay)
        elif turn:
            longest = max(longest, 20 * pi / turn)
    rate = float(fraction(sampled.rate_hz))
    return max(min(ceil(longest * rate), _LONGEST_HORIZON), 64)


@frozen(eq=False)
class _Comparison:
    """Curves on one grid, both without the whole-sample delay, which is the same in both."""

    sampled: Sampled
    points: Grid
    exact: bool
    analytic: Floats
    discrete: Floats
    within: tuple[Floats, ...]
    """The analytic impulse response at fractions 0, 1/8, ... of the sampling intervals."""
    step_within: tuple[Floats, ...]
    step_discrete: Floats

    @classmethod
    def of(cls, sampled: Sampled, points: Grid, exact: bool) -> "_Comparison":
        model, period = sampled.model, sampled.period_s
        within = tuple(_shifted(sampled, points.indices, -k / _FRACTIONS, exact) for k in range(_FRACTIONS))
        discrete = sampled_curve(sampled, 0, points.indices, exact)
        if sampled.fraction_s == 0:
            discrete[0] -= mid_float(model.feedthrough())
        return cls(
            sampled,
            points,
            exact,
            within[0],
            discrete / float(fraction(period)),
            within,
            tuple(_shifted(sampled, points.indices, -k / _FRACTIONS, exact, 1) for k in range(_FRACTIONS + 1)),
            sampled_curve(sampled, 1, points.indices, exact),
        )

    def _peak(self) -> float:
        return max(float(np.max(np.abs(values))) for values in self.within)

    def _rms(self, values: Floats) -> float:
        return float(np.sqrt(np.sum(self.points.weights * values**2)))

    def impulse(self) -> ImpulseError:
        difference = self.discrete - self.analytic
        delay, aligned = self._aligned()
        return ImpulseError(
            _relative(float(np.max(np.abs(difference))), self._peak()),
            _relative(self._rms(difference), self._rms(self.analytic)),
            _relative(
                float(np.sum(self.points.weights * np.abs(difference))),
                float(np.sum(self.points.weights * np.abs(self.analytic))),
            ),
            delay,
            _relative(float(np.max(np.abs(aligned))), self._peak()),
            _relative(self._rms(aligned), self._rms(self.analytic)),
        )

    def _aligned(self) -> tuple[float, Floats]:
        """The delay in samples that explains most, to 1e-4 by golden section, and what remains.

        None is better than one that lowers the r.m.s. error but raises the peak.
        """
        count = min(len(self.points.indices), _ALIGNING_EXACT_POINTS if self.exact else _ALIGNING_POINTS)
        some = np.linspace(0, len(self.points.indices) - 1, count).astype(int)  # steps of at least 1: no repetition

        def remains(delay: float, chosen: Indices | slice) -> Floats:
            shifted = _shifted(self.sampled, self.points.indices[chosen], delay, self.exact)
            return self.discrete[chosen] - shifted

        def size(delay: float) -> float:
            return float(np.sum(self.points.weights[some] * remains(delay, some) ** 2))

        coarse = [k / 8 for k in range(-8, 17)] if not self.exact else [k / 2 for k in range(-2, 5)]
        best = min(coarse, key=size)
        span = coarse[1] - coarse[0]
        low, high = best - span, best + span
        golden = (5**0.5 - 1) / 2
        while high - low > 1e-4:
            left, right = high - golden * (high - low), low + golden * (high - low)
            if size(left) < size(right):
                high = right
            else:
                low = left
        middle = (low + high) / 2
        delay = min((best, middle, 0.0, 0.5), key=size)
        plain, aligned = remains(0.0, slice(None)), remains(delay, slice(None))
        return (0.0, plain) if np.max(np.abs(aligned)) > np.max(np.abs(plain)) else (delay, aligned)

    def step(self) -> StepError:
        peak = max(float(np.max(np.abs(values))) for values in self.step_within)
        at_samples = float(np.max(np.abs(self.step_discrete - self.step_within[0])))
        between = max(float(np.max(np.abs(values - self.step_discrete))) for values in self.step_within)
        return StepError(_relative(at_samples, peak), _relative(between, peak))

    def staircase_at_samples(self) -> float:
        held = sample(self.sampled.model, Sampling(rate_hz=self.sampled.rate_hz, method="zero-order-hold"))
        reference = sampled_curve(held, 0, self.points.indices, self.exact)
        difference = np.abs(self.discrete_pulse() - reference)
        return float(np.sum(self.points.weights * difference))

    def discrete_pulse(self) -> Floats:
        return sampled_curve(self.sampled, 0, self.points.indices, self.exact)

    def staircase_between_samples(self) -> float:
        pulse = self.discrete_pulse()
        sums = []
        for k, now in enumerate(self.step_within):
            before = _shifted(self.sampled, self.points.indices - 1, -k / _FRACTIONS, self.exact, 1)
            if k == _FRACTIONS and self.sampled.fraction_s == 0:
                before[0] = 0.0  # the limit from the left: the pulse has not ended yet
            sums.append(float(np.sum(self.points.weights * np.abs(now - before - pulse))))
        return max(sums)


def _shifted(sampled: Sampled, indices: Indices, delay: float, exact: bool, integrations: int = 0) -> Floats:
    """The analytic response at (n - delay) T less the fraction of a sample of dead time; h(0) is the mean of both
    sides."""
    period, late = sampled.period_s, sampled.fraction_s
    if exact:
        shift = fmpq(*delay.as_integer_ratio())
        times = [(int(n) - shift) * period - late for n in indices]
        values = analytic_curve(sampled.model, integrations, times, exact=True)
        jump = np.array([time == 0 for time in times])
    else:
        times_s = np.asarray((indices - delay) * float(fraction(period)) - float(fraction(late)), dtype=np.float64)
        values = analytic_floats(sampled.model, integrations, times_s)
        jump = times_s == 0.0
    return np.where(jump, values / 2, values) if integrations == 0 else values


def _band_error(sampled: Sampled, up_to_hz: fmpq) -> BandError:
    """Largest magnitude and phase difference on a logarithmic grid over three decades, and at the limit itself."""
    limit = float(fraction(up_to_hz))
    frequencies = [*(limit * 10 ** (-3 + 3 * k / 96) for k in range(96)), limit]
    with working_bits(192):
        transfer = sampled.transfer(192)
        rows = []
        for frequency in frequencies:
            w = 2 * arb.pi() * fmpq(*frequency.as_integer_ratio())
            inverse_z = (acb(0, -w) * sampled.period_s).exp()
            wanted = sampled.model.at(acb(0, w))
            ratio = transfer.at(inverse_z) * inverse_z**sampled.delay_samples / wanted
            rows.append((frequency, _decibels(ratio), _degrees(ratio)))
    finite = [row for row in rows if isfinite(row[1]) and isfinite(row[2])]
    if not finite:
        return BandError(limit, None, None, None, None)
    by_magnitude = max(finite, key=lambda row: abs(row[1]))
    by_phase = max(finite, key=lambda row: abs(row[2]))
    return BandError(limit, by_magnitude[1], by_magnitude[0], by_phase[2], by_phase[0])


def _decibels(ratio: acb) -> float:
    """20 log10 |ratio|; not a number where the model has a zero or pole on the grid point."""
    value = mid_float(abs(ratio))
    return 20 * log(value, 10) if 0 < value < inf else float("nan")


def _degrees(ratio: acb) -> float:
    return atan2(mid_float(ratio.imag), mid_float(ratio.real)) * 180 / pi


def _gain_errors(sampled: Sampled) -> tuple[float | None, float | None]:
    """(relative DC gain error, relative growth error): one of them where H(s) ~ c s^-r, r >= 0, for s -> 0."""
    model = sampled.model
    if model.zeros_at_origin:
        return None, None

    def ratio() -> arb:
        transfer = sampled.transfer(192)
        value = acb(transfer.gain)
        for root in transfer.zeros:
            value *= sum(root.factor(), arb(0))
        for root in transfer.poles:
            if not root.at_one():
                value /= sum(root.factor(), arb(0))
        growth = arb(sampled.rate_hz) ** model.poles_at_origin
        return value.real * growth / model.origin_coefficient() - 1

    with working_bits(192):
        ball = ratio()
        error = 0.0 if ball.contains(0) else mid_float(ball)
    return (None, error) if model.poles_at_origin else (error, None)


def _mode_shifts(sampled: Sampled) -> tuple[ModeShift, ...]:
    """Empty where the poles are not images of the model's (coefficients rounded to integers)."""
    images = {pole.name: pole for pole in sampled.transfer().poles}
    rate = float(fraction(sampled.rate_hz))
    rows = []
    for root in sampled.model.poles:
        value = root.evaluate()
        if root.key not in images:
            continue
        image = images[root.key].value.log() * sampled.rate_hz
        frequency = abs(mid_float(value.imag)) / (2 * pi)
        rows.append(
            ModeShift(
                frequency,
                -mid_float(value.real),
                frequency / rate,
                abs(mid_float(image.imag)) / (2 * pi),
                -mid_float(image.real),
            )
        )
    return tuple(rows)
