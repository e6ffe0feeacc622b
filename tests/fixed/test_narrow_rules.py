"""Rounding, shift and overflow against their definitions in rationals, for integers and numpy alike."""

from fractions import Fraction
from math import floor

import numpy as np
import pytest

from afterkick.fixed.narrow import fit, rounding_offset, shift_right
from afterkick.fixed.program import Overflow, Rounding

VALUES = [*range(-260, 261), -(2**31), 2**31 - 1, -(2**62) - 1, 2**62 + 1]


def by_definition(value: int, places: int, rounding: Rounding) -> int:
    exact = Fraction(value, 2**places)
    if rounding is Rounding.FLOOR:
        return floor(exact)
    if rounding is Rounding.NEAREST:
        return floor(exact + Fraction(1, 2))
    return round(exact)  # Fraction rounds ties to even


@pytest.mark.parametrize("rounding", Rounding)
@pytest.mark.parametrize("places", [0, 1, 2, 3, 7, 30])
def test_shift_is_the_rounded_quotient(rounding, places):
    expected = [by_definition(value, places, rounding) for value in VALUES]
    assert [shift_right(value, places, rounding) for value in VALUES] == expected
    assert shift_right(np.array(VALUES, dtype=np.int64), places, rounding).tolist() == expected


@pytest.mark.parametrize("rounding", Rounding)
@pytest.mark.parametrize("places", [1, 2, 5])
def test_offset_is_the_most_the_rule_adds(rounding, places):
    added = {by_definition(value, places, rounding) * 2**places - value for value in range(-200, 200)}
    assert max(added) <= rounding_offset(places, rounding)
    assert rounding is Rounding.FLOOR or max(added) == rounding_offset(places, rounding)


@pytest.mark.parametrize("bits", [2, 3, 8, 12, 16, 32])
def test_overflow_rules(bits):
    low, high = -(2 ** (bits - 1)), 2 ** (bits - 1) - 1
    values = sorted({*VALUES, low - 1, low, high, high + 1})
    saturated = [low if v < low else high if v > high else v for v in values]
    wrapped = [next(w for w in (v % 2**bits, v % 2**bits - 2**bits) if low <= w <= high) for v in values]
    for overflow, expected in ((Overflow.SATURATE, saturated), (Overflow.WRAP, wrapped)):
        assert [fit(v, bits, overflow) for v in values] == expected
        assert fit(np.array(values, dtype=np.int64), bits, overflow).tolist() == expected
