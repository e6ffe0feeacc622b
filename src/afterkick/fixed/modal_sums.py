"""Rigorous absolute sums of pulse responses.

A response is a few exact first samples and then a sum of modes.  It is evaluated in float64 blocks: the powers within a
block and the weight of each mode at the start of a block come from balls, so that no error accumulates; what float64
rounds is bounded and added; what comes after the last block is summed in closed form, or bounded by geometric series.
"""

from collections.abc import Iterator, Sequence
from functools import cached_property, lru_cache
from itertools import pairwise
from math import comb, inf, isfinite

import numpy as np
from attrs import frozen
from flint import acb, arb, fmpq, fmpq_poly
from numpy.typing import NDArray

from afterkick.fixed.linear import RationalResponse
from afterkick.model.partial_fractions import Mode, expand, modes_known, polynomial_taylor
from afterkick.model.roots import RADIANS, algebraic_roots
from afterkick.numbers import certified, working_bits

__all__ = ["AbsoluteSum", "ModalResponse", "absolute_sum", "difference", "modal_response", "values", "without_constant"]

BLOCK = 4096
LONG, LONGEST = 1 << 16, 1 << 20
"""Samples after which less will do, and after which the tail is taken as it is: where one mode outlives the others, its
upper limit is then too large by half at most."""
TAIL, LONG_TAIL = 2.0**-24, 2.0**-12
"""Of the sum, what the limits of the tail may be apart, before and after LONG."""
UNIT_ROUNDOFF = 2.0**-53
POWER_BITS = 192

Floats = NDArray[np.float64]


@frozen(eq=False)
class ModalResponse:
    """h[n]: ``first`` (balls) for n < len(first), then sum over modes, j of c_j C(n-1, j) p^(n-1-j)."""

    first: tuple[arb, ...]
    modes: tuple[Mode, ...]

    @property
    def bounded(self) -> bool:
        """Whether every pole is strictly inside the unit circle, so that the absolute sum is finite."""
        return all(bool(abs(mode.pole) < 1) for mode in self.modes)


@frozen
class AbsoluteSum:
    """Both limits are rigorous; ``upper`` is infinite where a mode does not decay."""

    lower: float
    upper: float
    squares: float
    """sum over n of h[n]^2, an estimate; infinite where a mode does not decay."""


def modal_response(response: RationalResponse) -> ModalResponse:
    """The exact response of a rational transfer function, coefficients good to float64 and more."""
    degree_n, degree_d = response.numerator.degree(), response.denominator.degree()
    length = max(degree_n, degree_d)
    # in powers of z: z^length N(1/z) / (z^(length - degree_d) * prod(z - p))
    top = fmpq_poly(_reversed(response.numerator, length))
    bottom = fmpq_poly(_reversed(response.denominator, degree_d))
    extra = length - degree_d

    def compute() -> tuple[Mode, ...]:
        poles = [(root.evaluate(), root.real, times) for root, times in algebraic_roots(bottom, RADIANS).items()]
        every = [*poles, (acb(0), True, extra)] if extra else poles
        return expand(polynomial_taylor(top), every)[: len(poles)]

    return ModalResponse(
        tuple(arb(value) for value in response.samples(extra + 1)), certified(compute, modes_known, "a pulse response")
    )


def difference(one: ModalResponse, other: ModalResponse) -> ModalResponse:
    """one - other."""
    length = max(len(one.first), len(other.first))
    first = tuple(a - b for a, b in zip(_extended(one, length), _extended(other, length), strict=True))
    negated = tuple(Mode(m.pole, m.real, tuple(-c for c in m.coefficients)) for m in other.modes)
    return ModalResponse(first, one.modes + negated)


def without_constant(response: ModalResponse) -> tuple[ModalResponse, float]:
    """The response without its poles at z = 1, and a bound of the magnitude they stay at, infinite if they grow."""
    endless = [mode for mode in response.modes if _at_one(mode)]
    rest = ModalResponse(response.first, tuple(mode for mode in response.modes if not _at_one(mode)))
    if any(not c.is_zero() for mode in endless for c in mode.coefficients[1:]):
        return rest, inf
    constant = sum((mode.coefficients[0].real for mode in endless), arb(0))
    return rest, _up(float(abs(constant).upper()))


def _at_one(mode: Mode) -> bool:
    return bool((mode.pole - 1).is_zero())


def absolute_sum(response: ModalResponse) -> AbsoluteSum:
    """sum over n of |h[n]|, from below and above."""
    first = sum((abs(value) for value in response.first), arb(0))
    lower, upper = _down(float(first.lower())), _up(float(first.upper()))
    if not response.bounded:
        return AbsoluteSum(lower, inf, inf)
    squares = sum(float(value.mid()) ** 2 for value in response.first)
    if not response.modes:
        return AbsoluteSum(lower, upper, squares)
    blocks = _Blocks(response.modes)
    start, looked_at = len(response.first), 0
    while True:
        if start >= looked_at + looked_at // 8:
            looked_at = start
            least, most = _tail(response.modes, start)
            enough = TAIL if start < LONG else LONG_TAIL
            if most - least <= enough * (lower + least) or start >= LONGEST:
                late = _tail_squares(response.modes, start) if most > TAIL * lower else 0.0
                return AbsoluteSum(_down(lower + least), _up(upper + most), squares + late)
        block, slack = blocks.at(start)
        if not isfinite(slack):
            return AbsoluteSum(lower, inf, inf)
        total = float(np.sum(np.abs(block)))
        squares += float(block @ block)
        # pairwise or not, a float sum of BLOCK terms is within BLOCK unit round-offs
        rounding = total * BLOCK * UNIT_ROUNDOFF + slack
        lower, upper = _down(lower + max(total - rounding, 0.0)), _up(upper + total + rounding)
        start += BLOCK


def values(response: ModalResponse, number: int) -> Floats:
    """h[0] .. h[number-1] in float64, an estimate good to the slack of the blocks."""
    parts = [np.array([float(value.mid()) for value in response.first])]
    blocks = _Blocks(response.modes)
    start = len(response.first)
    while start < number and response.modes:
        parts.append(blocks.at(start)[0])
        start += BLOCK
    found = np.zeros(number)
    known = np.concatenate(parts)[:number]
    found[: len(known)] = known
    return found


def _up(value: float) -> float:
    return float(np.nextafter(value, inf))


def _down(value: float) -> float:
    return max(float(np.nextafter(value, -inf)), 0.0)


def _reversed(polynomial: fmpq_poly, length: int) -> list[fmpq]:
    coefficients = polynomial.coeffs()
    padded = [*coefficients, *([fmpq(0)] * (length + 1 - len(coefficients)))]
    return padded[::-1]


def _extended(response: ModalResponse, length: int) -> Iterator[arb]:
    yield from response.first
    for n in range(len(response.first), length):
        total = arb(0)
        for mode in response.modes:
            value = acb(0)
            for j, coefficient in enumerate(mode.coefficients):
                if n - 1 >= j:
                    value += coefficient * comb(n - 1, j) * mode.pole ** (n - 1 - j)
            total += value.real if mode.real else 2 * value.real
        yield total


@frozen(eq=False)
class _Blocks:
    """Samples of modes, BLOCK at a time."""

    modes: tuple[Mode, ...]

    @cached_property
    def _table(self) -> NDArray[np.complex128]:
        """C(k, i) p^(k - i), a row for each mode and each i."""
        with working_bits(POWER_BITS):
            parts = [(_exact_parts(mode.pole), len(mode.coefficients)) for mode in self.modes]
        return np.array([_powers(*pole, i) for pole, times in parts for i in range(times)])

    @cached_property
    def _parts(self) -> tuple[Floats, Floats, Floats]:
        """The table's real and imaginary parts, and the absolute sums of its rows."""
        table = self._table
        return np.ascontiguousarray(table.real), np.ascontiguousarray(table.imag), np.sum(np.abs(table), axis=1)

    def at(self, start: int) -> tuple[Floats, float]:
        """h[start] .. h[start + BLOCK - 1] without the first samples, and a bound of the sum of their errors.

        Beyond the range of doubles the bound is infinite.
        """
        k0 = start - 1
        weights: list[complex] = []
        radii: list[float] = []
        with working_bits(POWER_BITS):
            for mode in self.modes:
                scale = 1 if mode.real else 2
                times = len(mode.coefficients)
                powers = [mode.pole ** (k0 - d) if k0 >= d else acb(0) for d in range(times)]
                for i in range(times):
                    parts = (mode.coefficients[j] * comb(k0, j - i) * powers[j - i] for j in range(i, times))
                    weight = sum(parts, acb(0)) * scale
                    weights.append(_to_complex(weight))
                    radii.append(_up(float(weight.rad().upper())))
        factor = np.array(weights)
        if not np.all(np.isfinite(factor)):
            return np.zeros(BLOCK), inf
        real, imaginary, lengths = self._parts
        found: Floats = factor.real @ real - factor.imag @ imaginary
        sizes = float(np.abs(factor) @ lengths)
        # conversions to float64 (one round-off each), products and sums: each at most so many round-offs of the sizes;
        # then the radii of the weights; the last term is for powers that underflow
        slack = (2 * len(weights) + 16) * UNIT_ROUNDOFF * sizes + float(np.array(radii) @ lengths)
        return found, slack * (1 + 1e-9) + 1e-280 * float(np.sum(np.abs(factor)))


def _to_complex(value: acb) -> complex:
    """The midpoint, as the nearest doubles."""
    return complex(float(value.real.mid()), float(value.imag.mid()))


def _exact_parts(pole: acb) -> tuple[tuple[int, int], ...]:
    """Midpoints and radii of a ball as exact mantissas and exponents: a key for the table of its powers."""
    parts = (pole.real.mid(), pole.real.rad(), pole.imag.mid(), pole.imag.rad())
    return tuple((int(m), int(e)) for m, e in (part.man_exp() for part in parts))


@lru_cache(maxsize=256)
def _powers(
    re: tuple[int, int], re_radius: tuple[int, int], im: tuple[int, int], im_radius: tuple[int, int], lag: int
) -> NDArray[np.complex128]:
    """C(k, lag) p^(k - lag), k = 0 .. BLOCK - 1."""
    with working_bits(POWER_BITS):
        pole = acb(_ball(re, re_radius), _ball(im, im_radius))
        power = acb(1)
        found = [0j] * min(lag, BLOCK)
        for k in range(lag, BLOCK):
            found.append(_to_complex(power * comb(k, lag)))
            power *= pole
    return np.array(found)


def _ball(mid: tuple[int, int], radius: tuple[int, int]) -> arb:
    return arb(arb(mid[0]) * arb(2) ** mid[1], arb(radius[0]) * arb(2) ** radius[1])


def _tail(modes: Sequence[Mode], start: int) -> tuple[float, float]:
    """Limits of the absolute sum from ``start`` on."""
    k0 = start - 1
    with working_bits(POWER_BITS):
        plain = [mode for mode in modes if mode.real and len(mode.coefficients) == 1 and mode.pole.real > 0]
        closed = _one_sign(plain, k0)
        if closed is None:
            return 0.0, _up(float(_rest(modes, k0).upper()))
        rest = _rest([mode for mode in modes if mode not in plain], k0)
        return _down(float((closed - rest).lower())), _up(float((closed + rest).upper()))


def _one_sign(modes: Sequence[Mode], k0: int) -> arb | None:
    """The absolute sum of sum over i of c_i p_i^k, k >= k0, where that is certain never to change its sign.

    It does not where the partial sums at k0, the slowest first, all have one sign (summation by parts).  Which is the
    slowest must be certain: a filter and its integers have poles that doubles can't tell apart.
    """
    total, partial, signs = arb(0), arb(0), set()
    slowest_first = sorted(modes, key=lambda mode: mode.pole.real.mid(), reverse=True)
    if not all(bool(one.pole.real >= other.pole.real) for one, other in pairwise(slowest_first)):
        return None
    for mode in slowest_first:
        now = mode.coefficients[0].real * mode.pole.real**k0
        partial += now
        total += now / (1 - mode.pole.real)
        signs.add(1 if partial > 0 else -1 if partial < 0 else 0)
    return abs(total) if len(signs - {0}) <= 1 and 0 not in signs else None


def _rest(modes: Sequence[Mode], k0: int) -> arb:
    """A bound of the absolute sum from k0 on; modes that nearly cancel, as of a filter and its integers, in pairs."""
    total, single = arb(0), [mode for mode in modes if len(mode.coefficients) == 1]
    for mode in modes:
        if len(mode.coefficients) > 1:
            total += _geometric(mode, k0)
    while single:
        mode = single.pop()
        alone = _geometric(mode, k0)
        partner = min(single, key=lambda other: float(abs(other.pole - mode.pole).mid()), default=None)
        if partner is not None and mode.real == partner.real:
            together = _difference(mode, partner, k0)
            if together < alone + _geometric(partner, k0):
                single.remove(partner)
                alone = together
        total += alone
    return total


def _geometric(mode: Mode, k0: int) -> arb:
    """Terms C(k, j) r^(k-j) grow by at most q = (k0+1)/(k0+1-j) r from one to the next."""
    total = arb(0)
    radius = abs(mode.pole).upper()
    for j, coefficient in enumerate(mode.coefficients):
        q = radius * (k0 + 1) / (k0 + 1 - j) if k0 >= j else arb(1)
        if not q < 1:
            return arb(inf)
        size = abs(coefficient).upper() * (1 if mode.real else 2)
        total += size * comb(k0, j) * radius ** (k0 - j) / (1 - q)
    return total


def _difference(one: Mode, other: Mode, k0: int) -> arb:
    """|a p^k + b q^k| is at most |a + b| r^k + |b| k |p - q| r^(k-1), r the larger radius; summed from k0 on."""
    r = abs(one.pole).upper().max(abs(other.pole).upper())
    if not r < 1 or k0 < 1:
        return arb(inf)
    a, b = one.coefficients[0], other.coefficients[0]
    apart = abs(a + b) * r**k0 / (1 - r)
    apart += abs(b) * abs(one.pole - other.pole) * r ** (k0 - 1) * (k0 * (1 - r) + r) / (1 - r) ** 2
    return apart * (1 if one.real else 2)


def _tail_squares(modes: Sequence[Mode], start: int) -> float:
    """Of sum over n of h[n]^2 from ``start`` on, an estimate: products of modes two by two."""
    k0 = start - 1
    single = [mode for mode in modes if len(mode.coefficients) == 1]
    both = [(mode.pole, mode.coefficients[0]) for mode in single]
    both += [(mode.pole.conjugate(), mode.coefficients[0].conjugate()) for mode in single if not mode.real]
    with working_bits(POWER_BITS):
        total = sum((a * b * (p * q) ** k0 / (1 - p * q) for p, a in both for q, b in both), acb(0))
    return max(float(total.real.mid()), 0.0)
