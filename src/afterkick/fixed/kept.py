"""What the integers of a section keep exactly, as a lattice: every point of it keeps all of it.

Numerator and denominator are sums of integer steps that have the section's zeros and poles at z = 1, at z = -1 and on
the unit circle, and its symmetry.  Where the section has a share of the DC gain, the numerator's sum follows from the
denominator's: one of the numerator's steps gives way to it.

Where not all can be had, the order is this, and the first are kept: the poles on the unit circle, the zeros there and
the symmetry of the numerator (any integers can have them), the DC gain, the last two fraction bits of the numerator.
"""

from collections.abc import Sequence
from math import gcd
from typing import TYPE_CHECKING

from attrs import evolve, frozen
from flint import arb, fmpq, fmpz

from afterkick.fixed.pulse_grid import Integers
from afterkick.fixed.quantise import PROBE_BITS, ExactSection, Triple
from afterkick.numbers import is_exactly_zero, round_to_integer, working_bits

if TYPE_CHECKING:
    from afterkick.design.schema import Signals
    from afterkick.sampling.sampled import Sampled

__all__ = [
    "Lattice",
    "Share",
    "exact_code_gain",
    "exact_dc_gain",
    "gain_at_one",
    "handed_over",
    "lattice",
    "numerator_symmetry",
    "shares",
]

FEW_PLACES = 16
"""A denominator's sum may be made a multiple of a number up to this one: that moves it by a few last places."""
SMALL_PART = 8
"""And the number must be at most this part of the sum."""
LARGEST_ODD = 1 << 64
"""Gains with a larger odd denominator are not kept exactly: its factors would be longer than the coefficients."""
SHARE_BITS = 96
KEEPING_METHODS = ("bilinear", "zero-order-hold", "first-order-hold", "backward-difference")
UNITS: tuple[Triple, ...] = ((1, 0, 0), (0, 1, 0), (0, 0, 1))


def exact_dc_gain(sampled: "Sampled") -> fmpq | None:
    """The sampled filter's gain at z = 1, where it is known as a rational: the model's, if the method keeps it."""
    gain = sampled.model.dc_gain
    if gain is None or sampled.method in KEEPING_METHODS:
        return gain
    return gain if sampled.method == "matched" and sampled.options.match_hz is None else None


def exact_code_gain(sampled: "Sampled", signals: "Signals") -> fmpq | None:
    """The same from input codes to output codes."""
    gain = exact_dc_gain(sampled)
    return None if gain is None else gain * signals.input.full_scale / signals.output.full_scale


@frozen
class Share:
    """A section's part of the DC gain, scaling included."""

    value: fmpq
    exact: bool
    """Whether the value must be met; else it is good to 96 bits, and met as closely as the integers can."""


@frozen
class Lattice:
    """The integers of one section at given binary points, as functions of free integer coordinates."""

    section: ExactSection
    b_bits: int
    a_bits: int
    share: Share | None
    a_base: Triple
    a_steps: tuple[Triple, ...]
    b_steps: tuple[Triple, ...]
    """Those whose coordinates are free."""
    absorber: Triple | None
    """The numerator's step that gives way to the share of the DC gain."""
    start: tuple[int, ...]
    """The coordinates nearest to the exact coefficients, one by one: first of a_steps, then of b_steps."""

    def integers(self, coordinates: Sequence[int]) -> Integers:
        """The section at a point."""
        split = len(self.a_steps)
        a = _moved(self.a_base, self.a_steps, coordinates[:split])
        b = _moved((0, 0, 0), self.b_steps, coordinates[split:])
        if self.absorber is not None and self.share is not None:
            wanted = self.share.value * sum(a) * fmpq(2) ** (self.b_bits - self.a_bits) - sum(b)
            b = _moved(b, (self.absorber,), (int((wanted / sum(self.absorber) + fmpq(1, 2)).floor()),))
        return Integers(b, self.b_bits, a, self.a_bits)


def _moved(place: Triple, steps: Sequence[Triple], times: Sequence[int]) -> Triple:
    first, second, third = place
    for (s0, s1, s2), n in zip(steps, times, strict=True):
        first, second, third = first + n * s0, second + n * s1, third + n * s2
    return first, second, third


def shares(sections: Sequence[ExactSection], dc_gain: fmpq | None) -> tuple[Share | None, ...]:
    """What each section contributes to the gain at z = 1; None where a pole or zero there leaves nothing to keep.

    ``dc_gain`` is the exact gain of the whole, scaling included.  A sampled filter's sections have no gain at z = 1 but
    their scaling, except one, which has the rest.
    """
    if any(section.zero_at_one or section.pole_at_one for section in sections):
        return (None,) * len(sections)
    with working_bits(PROBE_BITS):
        plain = [bool((gain_at_one(section) - section.gain).contains(0)) for section in sections]
    found = [
        Share(one.gain, True) if flag else Share(_rounded_gain(one), False)
        for one, flag in zip(sections, plain, strict=True)
    ]
    if dc_gain is not None and plain.count(False) == 1:
        rest = dc_gain
        for section, flag in zip(sections, plain, strict=True):
            rest /= section.gain if flag else 1
        found[plain.index(False)] = Share(rest, True)
    return tuple(found)


def gain_at_one(section: ExactSection) -> arb:
    """The gain at z = 1, scaling included, at the present working precision."""
    (b0, b1, b2), (a0, a1, a2) = section.evaluate()
    return (b0 + b1 + b2) / (a0 + a1 + a2)


def _rounded_gain(section: ExactSection) -> fmpq:
    """The gain at z = 1 to about 96 bits, the same at every working precision."""
    with working_bits(PROBE_BITS):
        mantissa, exponent = gain_at_one(section).mid().man_exp()
    scale = fmpq(2) ** (SHARE_BITS - int(mantissa).bit_length() - int(exponent))
    return round_to_integer(lambda: gain_at_one(section) * scale, f"the DC gain of section {section.number}") / scale


def handed_over(
    sections: Sequence[ExactSection], points: Sequence[tuple[int, int]], parts: Sequence[Share | None]
) -> tuple[tuple[ExactSection, ...], tuple[Share | None, ...]]:
    """The sections and shares after those with an exact share out of reach have handed factors of it to others.

    An odd prime that the sum of a denominator would have to have, and can't have within a few last places, goes to a
    section that can, together with the power of two next to it: the one that lets no level between the two rise.
    ``points`` are the binary points of b and a.
    """
    owners, wanted = list(sections), list(parts)
    for home, (share, point) in enumerate(zip(parts, points, strict=True)):
        if share is None or not share.exact or lattice(owners[home], *point, share) is not None:
            continue
        for prime in _odd_primes(share.value.denominator):
            for other in _roomiest_first(owners, points, wanted, home):
                power = 1 << (prime.bit_length() - (home > other))
                given = _times(owners[other], wanted[other], fmpq(power, prime))
                if lattice(given[0], *points[other], given[1]) is not None:
                    owners[other], wanted[other] = given
                    owners[home], wanted[home] = _times(owners[home], wanted[home], fmpq(prime, power))
                    break
            if lattice(owners[home], *point, wanted[home]) is not None:
                break
    return tuple(owners), tuple(wanted)


def _odd_primes(number: fmpz) -> list[int]:
    """The odd prime factors, the largest first, as often as they occur; none of a number that has too long ones."""
    odd = int(number)
    odd >>= (odd & -odd).bit_length() - 1
    if odd >= LARGEST_ODD:
        return []
    return sorted((int(prime) for prime, times in fmpz(odd).factor() for _ in range(times)), reverse=True)


def _roomiest_first(
    owners: Sequence[ExactSection], points: Sequence[tuple[int, int]], wanted: Sequence[Share | None], home: int
) -> list[int]:
    """The other sections with an exact share, the largest sum of the denominator first."""
    others = [k for k, share in enumerate(wanted) if k != home and share is not None and share.exact]
    return sorted(others, key=lambda k: -abs(sum(owners[k].denominator(points[k][1]))))


def _times(section: ExactSection, share: Share | None, factor: fmpq) -> tuple[ExactSection, Share | None]:
    more = None if share is None else evolve(share, value=share.value * factor)
    return evolve(section, gain=section.gain * factor), more


def lattice(section: ExactSection, b_bits: int, a_bits: int, share: Share | None) -> Lattice | None:
    """The lattice of one section; None where its exact share is out of reach of nearby integers."""
    b_steps = _numerator_steps(section)
    absorber = None
    modulus = 1
    if share is not None:
        absorber = min((step for step in b_steps if sum(step)), key=lambda step: (abs(sum(step)), -step[1]))
        if share.exact:
            modulus = int((share.value * fmpq(2) ** (b_bits - a_bits) / sum(absorber)).denominator)
    denominator = _denominator(section, a_bits, modulus)
    if denominator is None:
        return None
    a_base, a_steps = denominator
    free = tuple(step for step in b_steps if step != absorber)
    b = section.numerator(b_bits)
    start = (0,) * len(a_steps) + tuple(b[_own_place(step, b_steps)] for step in free)
    return Lattice(section, b_bits, a_bits, share, a_base, a_steps, free, absorber, start)


def _own_place(step: Triple, steps: Sequence[Triple]) -> int:
    """Where this step has a 1 and the others nothing, so that its coordinate is that coefficient."""
    return next(i for i in range(3) if step[i] == 1 and not any(other[i] for other in steps if other != step))


def numerator_symmetry(section: ExactSection) -> int:
    """1 where b0 = b2, as for a zero pair on the unit circle; -1 where b0 = -b2; else, or where both are zero, 0."""
    with working_bits(PROBE_BITS):
        (b0, _, b2), _ = section.evaluate()
        if is_exactly_zero(b0) or is_exactly_zero(b2):
            return 0
        return bool((b0 - b2).contains(0)) - bool((b0 + b2).contains(0))


def _numerator_steps(section: ExactSection) -> tuple[Triple, ...]:
    """What all numerators with the section's exact zeros and symmetry are sums of."""
    with working_bits(PROBE_BITS):
        present = [not is_exactly_zero(value) for value in section.evaluate()[0]]
    symmetry = numerator_symmetry(section)
    if section.zero_at_one and section.zero_at_minus_one:
        return ((1, 0, -1),)
    if section.zero_at_one or section.zero_at_minus_one:
        sign = -1 if section.zero_at_one else 1
        if not all(present):
            return ((1, sign, 0),) if present[0] else ((0, 1, sign),)
        return ((1, 2 * sign, 1),) if symmetry else ((1, sign, 0), (0, sign, 1))
    if symmetry:
        return ((1, 0, symmetry), (0, 1, 0)) if present[1] else ((1, 0, symmetry),)
    return tuple(unit for unit, there in zip(UNITS, present, strict=True) if there)


def _denominator(section: ExactSection, a_bits: int, modulus: int) -> tuple[Triple, tuple[Triple, ...]] | None:
    """A point near the exact denominator whose sum is a multiple of ``modulus``, and the steps that keep that."""
    base, steps = section.denominator(a_bits), _denominator_steps(section)
    coarse = next((step for step in steps if sum(step)), None)
    if modulus == 1 or (coarse is None and sum(base) % modulus == 0):
        return base, steps
    if coarse is None or modulus > min(FEW_PLACES, abs(sum(base)) // SMALL_PART):
        return None
    for offset in sorted(range(-modulus, modulus + 1), key=abs):
        place = _moved(base, (coarse,), (offset,))
        if sum(place) % modulus == 0:
            stride = _moved((0, 0, 0), (coarse,), (modulus // gcd(modulus, sum(coarse)),))
            return place, tuple(stride if step == coarse else step for step in steps)
    return None


def _denominator_steps(section: ExactSection) -> tuple[Triple, ...]:
    """Those that keep the exact poles on the unit circle; at most one changes the sum, and it is the first."""
    with working_bits(PROBE_BITS):
        _, (_, a1, a2) = section.evaluate()
        free = [not is_exactly_zero(a1), not is_exactly_zero(a2)]
    if section.pole_at_one + section.pole_at_minus_one + section.pole_pair_on_circle >= sum(free):
        return ()
    if section.pole_pair_on_circle or not free[1]:
        return ((0, 1, 0),)
    if section.pole_at_one:
        return ((0, -1, 1),)
    if section.pole_at_minus_one:
        return ((0, 1, 1),)
    return ((0, 1, 0), (0, -1, 1)) if free[0] else ((0, 0, 1),)
