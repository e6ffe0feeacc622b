"""The nearest single of an exact number, decided at rising precision."""

from collections.abc import Callable
from math import frexp, ldexp

from flint import arb, fmpq

from afterkick.numbers import accurate, certified, round_to_integer, vanishes

__all__ = [
    "LARGEST_EXPONENT",
    "LARGEST_SINGLE",
    "MANTISSA_BITS",
    "SMALLEST_EXPONENT",
    "SMALLEST_NORMAL",
    "binary_exponent",
    "last_place_exponent",
    "nearest_multiple",
    "nearest_single",
]

# IEEE 754-2019, table 3.5, binary32.
MANTISSA_BITS = 24
SMALLEST_EXPONENT = -126
LARGEST_EXPONENT = 127
SMALLEST_NORMAL = 2.0**SMALLEST_EXPONENT
LARGEST_SINGLE = ldexp((1 << MANTISSA_BITS) - 1, LARGEST_EXPONENT - MANTISSA_BITS + 1)

ENOUGH_BITS = 64
"""With so many the exponent of a ball's midpoint serves: where it is wrong, the number rounds to a power of two."""


def binary_exponent(compute: Callable[[], arb], what: str) -> int | None:
    """floor(log2 |x|), or one beside it for x within 2^-64 of a power of two; None for zero.

    :raises Uncertified: where no working precision tells x from zero.
    """

    def attempt() -> tuple[arb, bool | None]:
        value = compute()
        return value, vanishes(value)

    def enough(found: tuple[arb, bool | None]) -> bool:
        value, zero = found
        return zero is True or (zero is False and accurate(value, ENOUGH_BITS))

    value, zero = certified(attempt, enough, what)
    if zero:
        return None
    mantissa, exponent = value.mid().man_exp()
    return int(abs(mantissa)).bit_length() - 1 + int(exponent)


def nearest_single(compute: Callable[[], arb], exponent: int, what: str) -> float:
    """The nearest single, ties to even, of a number with that :func:`binary_exponent`, at least -126.

    Infinite where the number rounds beyond the largest single.
    """
    value = nearest_multiple(compute, exponent - MANTISSA_BITS + 1, what)
    return value if abs(value) <= LARGEST_SINGLE else float("inf")


def nearest_multiple(compute: Callable[[], arb], place_exponent: int, what: str) -> float:
    """The nearest multiple of 2^place_exponent, ties to even; it must have at most 53 bits."""
    power = fmpq(2) ** -place_exponent
    return ldexp(round_to_integer(lambda: compute() * power, what), place_exponent)


def last_place_exponent(value: float) -> int:
    """log2 of the last place of a single that is not zero."""
    return max(frexp(value)[1] - 1, SMALLEST_EXPONENT) - MANTISSA_BITS + 1
