"""Pulse responses of many integer cascades at once, bit for bit the same on every machine.

The search compares hundreds of responses, so it needs them fast; and it must choose the same integers everywhere.  So
everything here is IEEE additions and multiplications of float64 arrays, element by element and in a fixed order: no
matrix product, no library reduction, no elementary function, whose last bits differ between machines.  The values are
estimates, good to float64; what they decide is only which integers are tried and taken.
"""

from collections.abc import Sequence
from math import isqrt, pi, sqrt
from typing import TYPE_CHECKING

import numpy as np
from attrs import frozen
from flint import arb, ctx, fmpq
from numpy.typing import NDArray

from afterkick.fixed.quantise import Triple
from afterkick.numbers import COINCIDENCE_BITS, certified

if TYPE_CHECKING:
    from afterkick.sampling.sampled import Sampled

__all__ = ["Floats", "Grid", "Integers", "exact_pulse", "pulses", "total", "transient_samples"]

Floats = NDArray[np.float64]

FADED_AFTER, GROWN_AFTER = 8, 4
"""Time constants."""
UNDAMPED_PERIODS = 4
SHORTEST, LONGEST = 8, 1 << 20


@frozen
class Integers:
    """One section: H = (sum b[i] z^-i) 2^-b_bits / ((sum a[i] z^-i) 2^-a_bits), a[0] = 2^a_bits."""

    b: Triple
    b_bits: int
    a: Triple
    a_bits: int


@frozen
class Grid:
    """The sample indices 0 .. dense, and then ``each`` of them at each of so many strides.

    The strides are 2, 5, 11, 23, 47, ...: 2 s + 1 after s, hardly ever with a common factor, so that no oscillation is
    met in the same phase all the time.
    """

    dense: int
    each: int
    strides: int

    @classmethod
    def over(cls, horizon: int, dense: int, each: int) -> "Grid":
        """As many strides as it takes to reach ``horizon``."""
        reached, stride, strides = min(dense, horizon), 2, 0
        while reached < horizon:
            reached += stride * each
            stride = 2 * stride + 1
            strides += 1
        return cls(min(dense, horizon), each, strides)

    @property
    def indices(self) -> tuple[int, ...]:
        """All of them, rising."""
        found, start, stride = list(range(self.dense + 1)), self.dense + 1, 2
        for _ in range(self.strides):
            found += range(start, start + stride * self.each, stride)
            start += stride * self.each
            stride = 2 * stride + 1
        return tuple(found)


def transient_samples(sections: Sequence[Integers]) -> int:
    """Samples until the slowest decaying pole has faded, and 4 periods of an undamped one; with poles that grow, until
    the fastest of them has grown by e^4."""
    longest = 1.0
    growth: list[float] = []
    for section in sections:
        one, a1, a2 = section.a
        discriminant = a1 * a1 - 4 * one * a2
        if discriminant < 0:
            radii = [sqrt(a2 / one)]
        else:
            root = isqrt(discriminant)
            radii = [abs(-a1 + root) / (2 * one), abs(-a1 - root) / (2 * one)]
        if discriminant < 0 and a2 == one:
            # the angle of the pole is at least this
            angle = sqrt((2 * one + a1) / one)
            longest = max(longest, UNDAMPED_PERIODS * 2 * pi / angle / FADED_AFTER)
        longest = max([longest, *(1 / (1 - radius) for radius in radii if radius < 1)])
        growth += [GROWN_AFTER / (radius - 1) for radius in radii if radius > 1]
    return max(SHORTEST, round(min([LONGEST, *(growth or [FADED_AFTER * longest])])))


def total(values: Floats) -> Floats:
    """The sum over the last axis, by halving."""
    while values.shape[-1] > 1:
        if values.shape[-1] % 2:
            values = np.concatenate([values, np.zeros((*values.shape[:-1], 1))], axis=-1)
        half = values.shape[-1] // 2
        values = values[..., :half] + values[..., half:]
    return values[..., 0]


def exact_pulse(sampled: "Sampled", gain: fmpq, grid: Grid) -> Floats:
    """The exact pulse response on the grid, without its whole-sample delay, times ``gain`` and rounded to integers:
    the same ones at every working precision."""

    def compute() -> list[int | None]:
        return [_nearest(value * gain) for value in sampled.pulse(grid.indices)]

    found = certified(compute, lambda integers: None not in integers, "the pulse response of the sampled filter")
    return np.array([float(integer) for integer in found if integer is not None])


def _nearest(value: arb) -> int | None:
    """The nearest integer; None: more bits needed.  A ball that holds a tie at 2048 bits is one, and goes up."""
    shifted = value + arb(0.5)
    rounded = shifted.floor().unique_fmpz()
    if rounded is None and ctx.prec >= COINCIDENCE_BITS:
        rounded = shifted.unique_fmpz()
    return None if rounded is None else int(rounded)


def pulses(b: Floats, a: Floats, grid: Grid) -> Floats:
    """The pulse responses of C cascades of m sections on the grid: shape (C, points).

    ``b`` has the shape (C, m, 3) and ``a`` (C, m, 2): b0, b1, b2, and a1, a2 behind a 1.
    """
    transition, place, readout, direct = _state_space(b, a)
    states = _orbit(transition, place, grid.dense)
    place = _product(transition, states[:, :, -1:])
    values = [direct[:, None], _read(readout, states)]
    advance = _product(transition, transition)
    for _ in range(grid.strides):
        states = _orbit(advance, place, grid.each)
        place = _product(advance, states[:, :, -1:])
        values.append(_read(readout, states))
        advance = _product(_product(advance, advance), transition)
    return np.concatenate(values, axis=1)


def _state_space(b: Floats, a: Floats) -> tuple[Floats, Floats, Floats, Floats]:
    """Transposed forms in a row: transition (C, n, n), block lower triangular; entry (C, n, 1), readout, direct."""
    cases, sections = b.shape[:2]
    size = 2 * sections
    transition, entry = np.zeros((cases, size, size)), np.zeros((cases, size, 1))
    readout, gain = np.zeros((cases, size)), np.ones(cases)
    for k in range(sections):
        b0, b1, b2 = (b[:, k, i] for i in range(3))
        a1, a2 = a[:, k, 0], a[:, k, 1]
        # out = b0 in + s1, s1' = b1 in - a1 out + s2, s2' = b2 in - a2 out
        out = b0[:, None] * readout
        out[:, 2 * k] += 1.0
        direct = b0 * gain
        transition[:, 2 * k] = b1[:, None] * readout - a1[:, None] * out
        transition[:, 2 * k, 2 * k + 1] += 1.0
        transition[:, 2 * k + 1] = b2[:, None] * readout - a2[:, None] * out
        entry[:, 2 * k, 0] = b1 * gain - a1 * direct
        entry[:, 2 * k + 1, 0] = b2 * gain - a2 * direct
        readout, gain = out, direct
    return transition, entry, readout, gain


def _product(left: Floats, right: Floats) -> Floats:
    """left @ right, case by case; left is block lower triangular."""
    found: Floats = left[:, :, 0, None] * right[:, None, 0, :]
    for j in range(1, left.shape[2]):
        top = j - j % 2
        found[:, top:] += left[:, top:, j, None] * right[:, None, j, :]
    return found


def _read(readout: Floats, states: Floats) -> Floats:
    found: Floats = readout[:, 0, None] * states[:, 0]
    for j in range(1, states.shape[1]):
        found += readout[:, j, None] * states[:, j]
    return found


def _orbit(advance: Floats, start: Floats, count: int) -> Floats:
    """start, advance start, advance^2 start, ...: (C, n, count)."""
    states = start
    while states.shape[2] < count:
        states = np.concatenate([states, _product(advance, states[:, :, : count - states.shape[2]])], axis=2)
        advance = _product(advance, advance)
    return states
