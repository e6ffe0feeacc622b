"""Integers with binary points: a number near an exact one, in a word of so many bits."""

import math
from collections.abc import Callable
from fractions import Fraction

from attrs import frozen
from flint import arb, fmpq

from afterkick.fixed.quantise import PROBE_BITS, Triple
from afterkick.numbers import mid_float, round_to_integer, working_bits

__all__ = ["MINUS_ONE", "ONE", "ZERO", "Scaled", "floor_log2", "nearest", "over_power_of_two", "rounded", "simplest"]

SIMPLEST = 1 << 16
"""A gain between 1/2 and 4 with a denominator up to this is taken as the rational it is."""


@frozen
class Scaled:
    """integer * 2^-fraction_bits."""

    integer: int
    fraction_bits: int

    @property
    def value(self) -> Fraction:
        """The exact number."""
        return self.integer * Fraction(2) ** -self.fraction_bits


ZERO = Scaled(0, 0)
ONE = Scaled(1, 0)
MINUS_ONE = Scaled(-1, 0)


def floor_log2(value: arb) -> int:
    """Of the magnitude, to within one."""
    return math.floor(mid_float(abs(value).log() / arb(2).log()))


def rounded(compute: Callable[[], arb], bits: int, what: str, most: int | None = None) -> Scaled:
    """The nearest integer, with the most fraction bits, ``most`` of them, with which it is at most 2^(bits-1)."""
    with working_bits(PROBE_BITS):
        fraction_bits = bits - floor_log2(compute())
    if most is not None:
        fraction_bits = min(fraction_bits, most)
    while True:
        integer = round_to_integer(lambda: compute() * fmpq(2) ** fraction_bits, what)  # noqa: B023 - called at once
        if abs(integer) <= 1 << (bits - 1):
            return Scaled(integer, fraction_bits)
        fraction_bits -= 1


def nearest(value: Fraction, bits: int) -> Scaled:
    """As :func:`rounded`, of an exact number other than zero."""
    size = value.numerator.bit_length() - value.denominator.bit_length()
    fraction_bits = bits - size + 1
    while abs(integer := round(value * Fraction(2) ** fraction_bits)) > 1 << (bits - 1):
        fraction_bits -= 1
    return Scaled(integer, fraction_bits)


def simplest(ball: arb) -> Fraction:
    """The simplest rational that a ball at PROBE_BITS holds, times a power of two; else the middle of the ball."""
    power = Fraction(2) ** -floor_log2(ball)
    mantissa, exponent = ball.mid().man_exp()
    middle = int(mantissa) * Fraction(2) ** int(exponent)
    simple = (middle * power).limit_denominator(SIMPLEST) / power
    return simple if ball.overlaps(arb(fmpq(simple.numerator, simple.denominator))) else middle


def over_power_of_two(first: Fraction, second: Fraction, third: Fraction) -> tuple[Triple, int]:
    """As integers with their common fraction bits; every denominator is a power of two."""
    bits = max(value.denominator.bit_length() - 1 for value in (first, second, third))
    return (int(first * (1 << bits)), int(second * (1 << bits)), int(third * (1 << bits))), bits
