"""Impulse and step responses as float64 curves, for tables, plots and labelled estimates.

Coefficients and exponents come from balls, so a curve is as good as its partial fractions allow.  Where they cancel by
more than eight digits the curve is asked for again in balls, at fewer points.
"""

from collections.abc import Callable, Sequence
from math import comb, factorial

import numpy as np
from attrs import frozen
from flint import acb, arb, fmpq
from numpy.typing import NDArray

from afterkick.model.model import Model
from afterkick.model.partial_fractions import Mode, evaluate, modes_known
from afterkick.numbers import certified, fraction, mid_float
from afterkick.sampling.sampled import Sampled

__all__ = ["Cancelling", "Floats", "Grid", "Indices", "analytic_curve", "analytic_floats", "grid", "sampled_curve"]

_SMALLEST_LOG2 = -1074
"""Of the smallest positive float."""

Floats = NDArray[np.float64]
Indices = NDArray[np.int64]


class Cancelling(ArithmeticError):
    """The partial fractions cancel by more than float64 can bear."""


@frozen(eq=False)
class Grid:
    """Sample indices with the number of samples each stands for."""

    indices: Indices
    weights: Floats


def grid(horizon_samples: int, most: int) -> Grid:
    """All of 0 .. horizon where that is at most ``most``, else dense at first and geometric later."""
    if horizon_samples < most:
        indices = np.arange(horizon_samples + 1, dtype=np.int64)
        return Grid(indices, np.ones(len(indices)))
    late = np.geomspace(most // 2, horizon_samples, most // 2).astype(np.int64)
    indices = np.concatenate([np.arange(most // 2, dtype=np.int64), late])
    indices = indices[np.diff(indices, prepend=-1) > 0]  # np.unique would import numpy.ma
    gaps = np.diff(indices).astype(np.float64)
    weights = np.concatenate([[1.0], (gaps[:-1] + gaps[1:]) / 2, [gaps[-1]]])
    return Grid(indices, weights)


def analytic_curve(model: Model, integrations: int, times: Sequence[fmpq], exact: bool) -> Floats:
    """The impulse (0) or step (1) response at ``times`` in seconds, zero before 0; no dead time, no Dirac part.

    :raises Cancelling: where float64 won't do and ``exact`` is false.
    """
    if exact:
        return _in_balls(lambda: _analytic_balls(model.response_modes(integrations), times), "the analytic response")
    floats = np.array([float(fraction(time)) for time in times])
    return analytic_floats(model, integrations, floats)


def analytic_floats(model: Model, integrations: int, times_s: Floats) -> Floats:
    """The same at float times."""
    modes = certified(lambda: model.response_modes(integrations), modes_known, "the partial fractions of the model")
    later = np.maximum(times_s, 0.0)

    def terms(mode: Mode) -> NDArray[np.complex128]:
        total = np.exp(_complex(mode.pole) * later)
        total *= sum(_complex(c) / factorial(j) * later**j for j, c in enumerate(mode.coefficients))
        return total

    return np.where(times_s < 0.0, 0.0, _summed(modes, terms, len(later)))


def sampled_curve(sampled: Sampled, integrations: int, indices: Indices, exact: bool) -> Floats:
    """The pulse (0) or step (1) response at sample indices, without the whole-sample delay.

    :raises Cancelling: where float64 won't do and ``exact`` is false.
    """
    early = sampled.model.order + 2
    first = certified(lambda: sampled.first_samples(early), lambda values: _known(values), "the first samples")
    start = np.array([mid_float(value) for value in first])
    start = np.cumsum(start) if integrations else start
    if exact:
        values = _in_balls(lambda: _sampled_balls(sampled.pulse_modes(integrations), indices), "the sampled response")
    else:
        modes = certified(lambda: sampled.pulse_modes(integrations), modes_known, "the partial fractions in z")
        values = _sampled_floats(modes, indices)
    return np.where(indices < early, start[np.minimum(indices, early - 1)], values)


def _sampled_floats(modes: Sequence[Mode], indices: Indices) -> Floats:
    k = np.maximum(indices - 1, 0).astype(np.float64)

    def terms(mode: Mode) -> NDArray[np.complex128]:
        logarithm, inverse = _complex(mode.pole.log()), _complex(1 / mode.pole)
        total = np.zeros(len(k), dtype=np.complex128)
        binomial = np.ones(len(k))
        for j, coefficient in enumerate(mode.coefficients):
            if j:
                binomial = binomial * np.maximum(k - (j - 1), 0.0) / j
            total += _complex(coefficient) * inverse**j * binomial
        total *= np.exp(logarithm * k)
        return total

    return _summed(modes, terms, len(k))


def _summed(modes: Sequence[Mode], terms: Callable[[Mode], NDArray[np.complex128]], points: int) -> Floats:
    total, magnitudes = np.zeros(points), np.zeros(points)
    with np.errstate(over="ignore", invalid="ignore"):
        for mode in modes:
            values = terms(mode)
            total += values.real if mode.real else 2 * values.real
            magnitudes += np.abs(values)
    if not np.all(np.isfinite(total)) or float(np.max(magnitudes)) > 1e8 * float(np.max(np.abs(total))):
        raise Cancelling
    return total


def _complex(value: acb) -> complex:
    return complex(mid_float(value.real), mid_float(value.imag))


def _known(values: Sequence[arb]) -> bool:
    """Whether the radii are far below the largest value, or below what a float can hold."""
    peak = arb(2) ** _SMALLEST_LOG2
    for value in values:
        peak = peak.max(abs(value).lower())
    return all(bool(value.rad() <= peak * arb(2) ** -60) for value in values)


def _in_balls(compute: Callable[[], list[arb]], what: str) -> Floats:
    return np.array([mid_float(value) for value in certified(compute, _known, what)])


def _analytic_balls(modes: Sequence[Mode], times: Sequence[fmpq]) -> list[arb]:
    return [evaluate(modes, time) if time >= 0 else arb(0) for time in times]


def _sampled_balls(modes: Sequence[Mode], indices: Indices) -> list[arb]:
    values = []
    for k in (max(int(n) - 1, 0) for n in indices):
        total = arb(0)
        for mode in modes:
            inner = acb(0)
            for j, coefficient in enumerate(mode.coefficients):
                if k >= j:
                    inner += coefficient * comb(k, j) * mode.pole ** (k - j)
            total += inner.real if mode.real else 2 * inner.real
        values.append(total)
    return values
