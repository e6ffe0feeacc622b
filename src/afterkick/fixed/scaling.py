"""Scaling between sections: which power of two brings each section's output into its word.

The norms here are estimates in double precision.  They choose a power of two and prove nothing: a wrong choice costs
resolution or clips, and the bounds, which are rigorous, would show it.
"""

import math
from collections.abc import Callable, Sequence

import numpy as np
from attrs import frozen
from numpy.typing import NDArray

__all__ = ["NORMS", "FloatSection", "norm_exponents", "norm_logarithms"]

SEGMENT = 2048
"""Samples of the pulse response in each octave of time."""
TIME_CONSTANTS = 12.0
LONGEST_LOG2 = 40
GRID = 512


@frozen
class FloatSection:
    """A section in doubles: H = 2^exponent * (b0 + b1/z + b2/z^2) / (1 + a1/z + a2/z^2), the largest b near 1."""

    b: tuple[float, float, float]
    a: tuple[float, float]
    exponent: int


def norm_exponents(sections: Sequence[FloatSection], norm: str) -> list[int | None]:
    """For each section, ceil(log2) of the norm of the response from the input to that section's output.

    ``norm`` is a key of :data:`NORMS`.  The logarithm is first rounded to 3 decimals, so that the last bits of a
    library's arithmetic don't decide.  None where the norm is zero or doesn't exist.
    """
    return [None if value is None else math.ceil(value) for value in norm_logarithms(sections, norm)]


def norm_logarithms(sections: Sequence[FloatSection], norm: str) -> list[float | None]:
    """What :func:`norm_exponents` rounds up."""
    logarithms: list[float | None] = []
    total = 0
    with np.errstate(all="ignore"):
        norms = NORMS[norm](sections)
    for section, value in zip(sections, norms, strict=True):
        total += section.exponent
        usable = math.isfinite(value) and value > 0
        logarithms.append(round(math.log2(value), 3) + total if usable else None)
    return logarithms


def _pole_radius(section: FloatSection) -> float:
    return float(np.max(np.abs(np.roots([1.0, *section.a]))))


def _power_sums(sections: Sequence[FloatSection], power: int) -> NDArray[np.float64]:
    """Sum over n of |h_k[n]|^power for the response h_k from the input to section k's output.

    The first 2 * SEGMENT samples are taken one by one, each later octave of time in SEGMENT samples, evenly spaced:
    so a slow response costs the logarithm of its length.
    """
    transition, entry, readout, direct = _state_space(sections)
    slack = max(1.0 - max(map(_pole_radius, sections)), 2.0**-LONGEST_LOG2)
    horizon = TIME_CONSTANTS / slack
    sums: NDArray[np.float64] = np.abs(direct) ** power
    stride, start, advance = 1, entry, transition
    states = _orbit(advance, start, 2 * SEGMENT)
    sums += np.sum(np.abs(readout @ states) ** power, axis=1)
    reached = 2 * SEGMENT
    while reached < horizon:
        start = np.linalg.matrix_power(advance, SEGMENT if stride > 1 else 2 * SEGMENT) @ start
        stride *= 2
        advance = advance @ advance
        states = _orbit(advance, start, SEGMENT)
        sums += stride * np.sum(np.abs(readout @ states) ** power, axis=1)
        reached += stride * SEGMENT
    return sums


def _orbit(advance: NDArray[np.float64], start: NDArray[np.float64], count: int) -> NDArray[np.float64]:
    """Columns start, advance*start, advance^2*start, ...: by doubling, so in log2(count) products."""
    states = start[:, None]
    while states.shape[1] < count:
        states = np.concatenate([states, advance @ states], axis=1)
        advance = advance @ advance
    return states


def _state_space(sections: Sequence[FloatSection]) -> tuple[NDArray[np.float64], ...]:
    """The cascade as one system: transition, entry (of the pulse), one row of readout a section, direct parts."""
    size = 2 * len(sections)
    transition = np.zeros((size, size))
    readout = np.zeros((len(sections), size))
    direct = np.zeros(len(sections))
    entry = np.zeros(size)
    row, gain = np.zeros(size), 1.0
    for k, section in enumerate(sections):
        (b0, b1, b2), (a1, a2) = section.b, section.a
        own = slice(2 * k, 2 * k + 2)
        # transposed form: out = b0 in + s1, s1' = b1 in - a1 out + s2, s2' = b2 in - a2 out
        out = b0 * row
        out[2 * k] += 1.0
        transition[2 * k] = b1 * row - a1 * out
        transition[2 * k, 2 * k + 1] += 1.0
        transition[2 * k + 1] = b2 * row - a2 * out
        entry[own] = (b1 * gain - a1 * b0 * gain, b2 * gain - a2 * b0 * gain)
        row, gain = out, b0 * gain
        readout[k], direct[k] = row, gain
    return transition, entry, readout, direct


def _peak_gain(sections: Sequence[FloatSection]) -> list[float]:
    return [float(x) for x in _power_sums(sections, 1)]


def _two_norm(sections: Sequence[FloatSection]) -> list[float]:
    return [float(x) for x in np.sqrt(_power_sums(sections, 2))]


def _infinity(sections: Sequence[FloatSection]) -> list[float]:
    """The peak of the magnitude on a grid of frequencies: even, logarithmic, and at each pole's own angle."""
    poles = np.concatenate([np.roots([1.0, *section.a]) for section in sections])
    grid = np.concatenate(
        [np.linspace(0.0, math.pi, GRID), math.pi * np.logspace(-9, 0, GRID), np.abs(np.angle(poles))]
    )
    delay = np.exp(-1j * grid)
    magnitude = np.ones_like(grid)
    norms = []
    for section in sections:
        (b0, b1, b2), (a1, a2) = section.b, section.a
        magnitude = magnitude * np.abs(b0 + delay * (b1 + delay * b2)) / np.abs(1.0 + delay * (a1 + delay * a2))
        norms.append(float(np.max(magnitude)))
    return norms


NORMS: dict[str, Callable[[Sequence[FloatSection]], list[float]]] = {
    "peak-gain": _peak_gain,
    "two-norm": _two_norm,
    "infinity": _infinity,
}
"""The absolute sum of the pulse response, the root of its sum of squares, the peak of the magnitude response."""
