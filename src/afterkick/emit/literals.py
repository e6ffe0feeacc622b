"""The one owner of numbers as text: C literals, and the decimals of comments."""

from decimal import Decimal

from flint import fmpq

__all__ = ["container_bits", "decimal", "integer", "signed"]

CONTAINERS = (8, 16, 32, 64)
LONGEST_DECIMAL = 18
DOUBLE_RANGE_BITS = 1020
"""A quotient of integers whose lengths differ by less is a normal double."""


def container_bits(bits: int) -> int:
    """The width of the narrowest standard integer type that holds a word of ``bits`` bits."""
    return next(width for width in CONTAINERS if width >= bits)


def integer(value: int, bits: int) -> str:
    """A C expression of type int_leastN_t (at least ``bits`` wide, 32 or 64) with exactly that value.

    The lowest value has no literal of its own: -2^(bits-1) is written as a difference.
    """
    macro = f"INT{bits}_C"
    if value >= 0:
        return f"{macro}({value})"
    if value == -(1 << (bits - 1)):
        return f"(-{macro}({-value - 1}) - 1)"
    return f"-{macro}({-value})"


def signed(value: float) -> str:
    """A small error with its sign, two digits after the point."""
    return f"{value:+.2f}"


def decimal(value: fmpq) -> str:
    """An exact decimal where the rational has a short one, else 9 significant digits after "about"."""
    numerator, denominator = int(value.numerator), int(value.denominator)
    places = _places(denominator)
    if places is not None:
        digits = str(abs(numerator) * 10**places // denominator).rjust(places + 1, "0")
        if len(digits) <= LONGEST_DECIMAL:
            whole, part = digits[: len(digits) - places], digits[len(digits) - places :].rstrip("0")
            return ("-" if numerator < 0 else "") + whole + (f".{part}" if part else "")
    if abs(numerator.bit_length() - denominator.bit_length()) < DOUBLE_RANGE_BITS:
        return f"about {numerator / denominator:.9g}"
    return f"about {Decimal(numerator) / Decimal(denominator):.9g}"


def _places(denominator: int) -> int | None:
    """How many decimal places 1/denominator has; None where it has no end."""
    twos = fives = 0
    while denominator % 2 == 0:
        denominator, twos = denominator // 2, twos + 1
    while denominator % 5 == 0:
        denominator, fives = denominator // 5, fives + 1
    return max(twos, fives) if denominator == 1 else None
