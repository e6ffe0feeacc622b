"""One section's coefficients as integers: rounding, what is kept exactly, and what is refused.

Kept exactly where the exact section has them: poles at z = 1, z = -1 and on the unit circle, zeros at z = 1, z = -1
and on the unit circle.
"""

import math
from collections.abc import Callable, Sequence
from typing import TYPE_CHECKING

from attrs import frozen
from flint import arb, ctx, fmpq

from afterkick.errors import Problem
from afterkick.fixed.program import Coefficient
from afterkick.numbers import is_exactly_zero, mid_float, round_to_integer, to_text, working_bits

if TYPE_CHECKING:
    from afterkick.sampling.sampled import Sampled, Section

__all__ = [
    "ENOUGH_LAST_PLACES",
    "REMEDY",
    "ExactSection",
    "denominator_fraction_bits",
    "denominator_problems",
    "exact_sections",
    "numerator_fraction_bits",
    "numerator_problems",
]

ENOUGH_LAST_PLACES = 8
"""An integer below this has fewer than 4 significant bits."""
PROBE_BITS = 256
"""Where exact cancellations are looked for: a sum that is zero to this many bits is taken as zero."""
KEY = "arithmetic.coefficient_bits"
REMEDY = 'wider coefficients; else structure = "delta" or "coupled"; else a lower sampling rate'

Triple = tuple[int, int, int]
Balls = tuple[arb, arb, arb]


@frozen
class ExactSection:
    """A section's exact numbers on call, its share of the scaling, and its exact cancellations."""

    number: int
    """1 for the first."""
    sampled: "Sampled"
    gain: fmpq
    """In front of the numerator."""
    zero_at_one: bool
    zero_at_minus_one: bool
    pole_at_one: bool
    pole_at_minus_one: bool
    pole_pair_on_circle: bool
    unstable: bool
    """Whether the exact section has a pole outside the unit circle."""

    @property
    def marginal(self) -> bool:
        """Whether a pole is on the unit circle."""
        return self.pole_at_one or self.pole_at_minus_one or self.pole_pair_on_circle

    def evaluate(self) -> tuple[Balls, Balls]:
        """b, times the gain, and a at the present working precision."""
        section = self.sampled.sections(ctx.prec)[self.number - 1]
        b0, b1, b2 = section.b
        return (b0 * self.gain, b1 * self.gain, b2 * self.gain), section.a

    def numerator(self, fraction_bits: int) -> Triple:
        """round(b * 2^fraction_bits); the middle one gives way where a zero at z = 1 or -1 is to be kept."""
        b0, b1, b2 = (self._rounded(0, i, fraction_bits) for i in range(3))
        if self.zero_at_one:
            b1 = -(b0 + b2)
        elif self.zero_at_minus_one:
            b1 = b0 + b2
        return b0, b1, b2

    def denominator(self, fraction_bits: int) -> Triple:
        """2^fraction_bits and round(a * 2^fraction_bits); a2 gives way where a pole at z = 1 or -1 is to be kept."""
        one = 1 << fraction_bits
        a1, a2 = self._rounded(1, 1, fraction_bits), self._rounded(1, 2, fraction_bits)
        if self.pole_at_one and a2:
            a2 = -one - a1
        elif self.pole_at_minus_one and a2:
            a2 = a1 - one
        return one, a1, a2

    def largest_numerator_log2(self) -> float | None:
        """log2 of the largest numerator coefficient, an estimate; None where all are zero."""
        b, _ = self.evaluate()
        present = [abs(x).mid() for x in b if not is_exactly_zero(x)]
        return max((mid_float(x.log() / arb(2).log()) for x in present), default=None)

    def coefficients(self, b: Triple, b_bits: int, a: Triple, a_bits: int) -> tuple[Coefficient, ...]:
        """The integers beside what they stand for; exact zeros are left out."""
        exact_b, exact_a = self.evaluate()
        rows = [(f"b{i}", exact_b[i], b[i], b_bits) for i in range(3)]
        rows += [(f"a{i}", exact_a[i], a[i], a_bits) for i in (1, 2)]
        return tuple(
            Coefficient(name, stored, bits, to_text(exact, 9), mid_float(stored - exact * _power_of_two(bits)))
            for name, exact, stored, bits in rows
            if stored or not is_exactly_zero(exact)
        )

    def _rounded(self, group: int, index: int, fraction_bits: int) -> int:
        power = fmpq(2) ** fraction_bits
        what = f"coefficient {'ba'[group]}{index} of section {self.number}"
        return round_to_integer(lambda: self.evaluate()[group][index] * power, what)


def _power_of_two(exponent: int) -> fmpq:
    return fmpq(2) ** exponent


def exact_sections(sampled: "Sampled") -> tuple[ExactSection, ...]:
    """The sections of ``sampled``, all with gain 1."""
    with working_bits(PROBE_BITS):
        return tuple(_exact_section(sampled, section, i + 1) for i, section in enumerate(sampled.sections(PROBE_BITS)))


def _exact_section(sampled: "Sampled", section: "Section", number: int) -> ExactSection:
    (b0, b1, b2), (_, a1, a2) = section.b, section.a
    # Sampled promises 1 + a1 + a2 relative to itself, so a ball of it that holds zero is zero; the other sums are
    # zero to some 250 bits of their largest term, and no integer of ours can tell that from zero.
    may_be_marginal = sampled.marginal
    two_terms = sum(not is_exactly_zero(b) for b in (b0, b1, b2)) > 1
    return ExactSection(
        number=number,
        sampled=sampled,
        gain=fmpq(1),
        zero_at_one=two_terms and bool((b0 + b1 + b2).contains(0)),
        zero_at_minus_one=two_terms and bool((b0 - b1 + b2).contains(0)),
        pole_at_one=may_be_marginal and bool((1 + a1 + a2).contains(0)),
        pole_at_minus_one=may_be_marginal and bool((1 - a1 + a2).contains(0)),
        pole_pair_on_circle=may_be_marginal and bool((a2 - 1).contains(0)),
        unstable=bool(1 + a1 + a2 < 0) or bool(1 - a1 + a2 < 0) or bool(a2 > 1),
    )


def significant_bits(integer: int) -> int:
    """How many bits the magnitude has."""
    return abs(integer).bit_length()


def denominator_problems(section: ExactSection, a: Triple, fraction_bits: int) -> list[Problem]:
    """A pole that rounding took to the other side of the unit circle, or a pole near z = 1 that lost its place.

    The Jury test of order 2, exact in integers.
    """
    one, a1, a2 = a
    at_one, at_minus_one, inside = one + a1 + a2, one - a1 + a2, one - a2
    stable = (
        (at_one > 0 or (at_one == 0 and section.pole_at_one))
        and (at_minus_one > 0 or (at_minus_one == 0 and section.pole_at_minus_one))
        and (inside > 0 or (inside == 0 and section.pole_pair_on_circle))
    )
    where = f"{KEY}, section {section.number}"
    stored = f"a1 = {a1}, a2 = {a2} (in 2^-{fraction_bits})"
    if section.unstable and at_one >= 0 and at_minus_one >= 0 and inside >= 0:
        found = f"no pole is outside the unit circle any more after rounding to {stored}"
        return [Problem(where, found, "an unstable pole that stays one, as the exact filter has it", REMEDY)]
    if not stable and not section.unstable:
        found = f"a pole is on or outside the unit circle after rounding to {stored}"
        return [Problem(where, found, "poles inside the unit circle, as the exact filter has them", REMEDY)]
    if not section.pole_at_one and abs(at_one) < ENOUGH_LAST_PLACES:
        found = f"1 + a1 + a2 keeps {significant_bits(at_one)} significant bits after rounding to {stored}"
        return [Problem(where, found, "at least 4 significant bits", REMEDY)]
    return []


def numerator_problems(section: ExactSection, b: Triple, fraction_bits: int) -> list[Problem]:
    """A numerator that lost its meaning."""
    largest = max(map(abs, b))
    if largest >= ENOUGH_LAST_PLACES:
        return []
    found = (
        f"the largest numerator coefficient keeps {significant_bits(largest)} significant bits "
        f"after rounding to b = {', '.join(map(str, b))} (in 2^-{fraction_bits})"
    )
    remedy = f"a smaller output full scale, {REMEDY}"
    return [Problem(f"{KEY}, section {section.number}", found, "at least 4 significant bits", remedy)]


def widest_fraction_bits(integers: Callable[[int], Sequence[int]], coefficient_bits: int, start: int) -> int:
    """The most fraction bits, from ``start`` down, with which every integer is at most 2^(coefficient_bits - 1)."""
    limit = 1 << (coefficient_bits - 1)
    bits = start
    while max(map(abs, integers(bits))) > limit:
        bits -= 1
    return bits


def numerator_fraction_bits(section: ExactSection, coefficient_bits: int, most: int) -> int | None:
    """The most fraction bits, at most ``most``, that the numerator's own size allows; None where it is zero."""
    largest = section.largest_numerator_log2()
    if largest is None:
        return None
    start = min(most, coefficient_bits - math.floor(largest) + 1)
    return widest_fraction_bits(section.numerator, coefficient_bits, start)


def denominator_fraction_bits(section: ExactSection, coefficient_bits: int) -> int:
    """The most fraction bits with which the denominator, its leading 1 among it, fits the coefficient word."""
    return widest_fraction_bits(section.denominator, coefficient_bits, coefficient_bits - 1)
