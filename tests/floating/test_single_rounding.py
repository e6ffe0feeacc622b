"""Nearest singles against IEEE 754 arithmetic of numpy and of mpmath with a 24-bit mantissa."""

import random
import struct
from fractions import Fraction

import mpmath
import numpy as np
import pytest
from flint import arb, fmpq

from afterkick.emit.float_literals import single
from afterkick.floating.rounding import (
    LARGEST_SINGLE,
    SMALLEST_NORMAL,
    binary_exponent,
    last_place_exponent,
    nearest_single,
)


def nearest(value: Fraction) -> float:
    def compute() -> arb:
        return arb(fmpq(value.numerator, value.denominator))

    exponent = binary_exponent(compute, "a probe")
    assert exponent is not None
    return nearest_single(compute, exponent, "a probe")


def test_limits_of_the_format():
    assert np.finfo(np.float32).max == LARGEST_SINGLE
    assert np.finfo(np.float32).tiny == SMALLEST_NORMAL


def test_doubles_round_as_numpy_rounds_them():
    draw = random.Random(1)
    for _ in range(500):
        value = draw.choice((1, -1)) * draw.uniform(1, 2) * 2.0 ** draw.randint(-125, 126)
        assert nearest(Fraction(value)) == float(np.float32(value)) == struct.unpack("f", struct.pack("f", value))[0]


def test_ties_go_to_even_and_hairs_beside_them_do_not():
    for odd in (1, 3, 2**24 - 1, 2**24 + 1, 2**25 - 1):
        tie = Fraction(odd * 2 ** (25 - odd.bit_length()) | 1, 2**30)
        hair = Fraction(1, 2**300)
        assert nearest(tie) == float(np.float32(float(tie)))
        assert Fraction(nearest(tie - hair)) < tie < Fraction(nearest(tie + hair))


def test_beside_a_power_of_two():
    for exponent in (-126, -1, 0, 1, 127):
        power = Fraction(2) ** exponent
        for value in (power, power * (1 + Fraction(1, 2**400))):
            assert nearest(value) == power
        assert nearest(power * (1 + Fraction(3, 2**25))) == float(power) * (1 + 2.0**-23)
    # below the power the last place is half as large
    assert nearest(1 - Fraction(1, 2**24)) == 1 - 2.0**-24
    assert nearest(1 - Fraction(1, 2**26)) == 1


def test_overflow_is_told():
    assert nearest(Fraction(LARGEST_SINGLE)) == LARGEST_SINGLE
    assert nearest(Fraction(2) ** 128 - Fraction(2) ** 103) == float("inf")
    assert nearest(Fraction(2) ** 128 - Fraction(2) ** 103 - 1) == LARGEST_SINGLE


def test_transcendental_numbers_against_mpmath():
    """mpmath rounds to nearest, ties to even, at any precision; 24 bits are those of a single."""
    draw = random.Random(2)
    for _ in range(200):
        argument = Fraction(draw.randint(1, 10**6), draw.randint(1, 10**6))
        exact = fmpq(argument.numerator, argument.denominator)

        def compute(exact: fmpq = exact) -> arb:
            return (-arb(exact) / 1000).exp()

        with mpmath.workprec(400):
            wanted = mpmath.exp(-mpmath.mpf(argument.numerator) / argument.denominator / 1000)
        exponent = binary_exponent(compute, "a probe")
        if exponent is None or exponent < -126:
            continue
        with mpmath.workprec(24):
            assert nearest_single(compute, exponent, "a probe") == float(+wanted)


def test_zero_has_no_exponent():
    assert binary_exponent(lambda: arb(0), "zero") is None
    # a difference that no precision tells from zero is zero
    assert binary_exponent(lambda: arb(2).sqrt() ** 2 - 2, "zero") is None


def bit_patterns(count: int, seed: int) -> np.ndarray:
    """Random finite singles of all exponents, subnormals and the corners among them."""
    patterns = np.random.default_rng(seed).integers(0, 1 << 32, size=count, dtype=np.uint32)
    corners = [0x00000000, 0x00000001, 0x007FFFFF, 0x00800000, 0x7F7FFFFF, 0x3F800000, 0x3F7FFFFF, 0x80000001]
    powers = [exponent << 23 for exponent in range(255)]
    values = np.concatenate([patterns, np.array(corners + powers, dtype=np.uint32)]).view(np.float32)
    return values[np.isfinite(values) & ((values != 0) | ~np.signbit(values))]


def test_literals_read_back_exactly():
    """Read as a double and then rounded, as some compilers do; the next test reads them exactly."""
    values = bit_patterns(30_000, 3)
    texts = [single(float(value)) for value in values]
    assert all(text.endswith("f") and ("." in text or "e" in text) for text in texts)
    again = np.array([float(text[:-1]) for text in texts]).astype(np.float32)
    assert (again.view(np.uint32) == values.view(np.uint32)).all()


def neighbours(value: np.float32) -> list[Fraction]:
    with np.errstate(over="ignore"):
        both = [np.nextafter(value, np.float32(side)) for side in (-np.inf, np.inf)]
    return [Fraction(float(other)) for other in both if np.isfinite(other)]


def test_literals_are_nearer_to_no_other_single_and_of_the_fewest_digits():
    for value in bit_patterns(2000, 4):
        exact = Fraction(float(value))

        def names(decimal: Fraction, value: np.float32 = value, exact: Fraction = exact) -> bool:
            return all(abs(decimal - exact) < abs(decimal - other) for other in neighbours(value))

        text = single(float(value))
        assert names(Fraction(text[:-1])), text
        digits = len(text[:-1].split("e")[0].strip("-").replace(".", "").strip("0"))
        if digits > 1:
            assert not names(Fraction(f"{float(value):.{digits - 2}e}")), text


@pytest.mark.parametrize("value", [1.0, 1.5, -1.75, 2.0**-126, 2.0**127, 0.99999994])
def test_last_place(value):
    assert 2.0 ** last_place_exponent(value) == float(np.spacing(np.float32(abs(value))))
