"""Singles as C literals."""

from fractions import Fraction
from math import copysign, frexp

from afterkick.floating.rounding import SMALLEST_NORMAL, last_place_exponent

__all__ = ["single"]

ENOUGH_DIGITS = 9
"""Of a decimal that tells each single from all others (IEEE 754-2019, 5.12.2)."""


def single(value: float) -> str:
    """A literal of type float for a finite single: the fewest digits that are nearer to it than to any other.

    No tie: however a compiler rounds ties, and where it reads a double first, the same single comes out.
    """
    if value == 0:
        return "0.0f"
    size = abs(value)
    place = Fraction(2) ** last_place_exponent(size)
    # the next smaller single is only half as far from a power of two, among normal ones
    lowest = Fraction(size) - place / (4 if frexp(size)[0] == 0.5 and size > SMALLEST_NORMAL else 2)
    highest = Fraction(size) + place / 2
    decimal = size
    for digits in range(1, ENOUGH_DIGITS + 1):
        decimal = float(f"{size:.{digits - 1}e}")
        # a double of so few digits prints as them
        if lowest < Fraction(repr(decimal)) < highest:
            break
    return f"{copysign(decimal, value)!r}f"
