"""Exact rationals and balls: the one owner of working precision.

A ball (python-flint ``arb``/``acb``) is a midpoint with a rigorous radius.  Nothing here, or in any stage built on it,
compares against an absolute threshold: a result is computed at rising precision until its radius is small enough for
its use (:func:`certified`).
"""

from collections.abc import Callable, Iterator
from contextlib import contextmanager
from decimal import Decimal
from fractions import Fraction
from math import inf
from typing import TypeVar

from flint import acb, arb, ctx, fmpq

from afterkick.errors import Uncertified

__all__ = [
    "COINCIDENCE_BITS",
    "HIGHEST_BITS",
    "LOWEST_BITS",
    "accurate",
    "ball",
    "certified",
    "decided_sign",
    "fraction",
    "is_exactly_zero",
    "mid_float",
    "nearest_float",
    "rational",
    "round_to_integer",
    "to_text",
    "vanishes",
    "working_bits",
]

LOWEST_BITS = 128
HIGHEST_BITS = 16384
COINCIDENCE_BITS = 2048

Result = TypeVar("Result")


def rational(value: Decimal | Fraction | int | str) -> fmpq:
    """The exact rational that a decimal, fraction or integer stands for."""
    exact = Fraction(value)
    return fmpq(exact.numerator, exact.denominator)


def fraction(value: fmpq) -> Fraction:
    """The same rational as a standard-library fraction."""
    return Fraction(int(value.numerator), int(value.denominator))


def nearest_float(value: fmpq) -> float:
    """The nearest double; an infinity beyond the range of doubles."""
    try:
        return float(fraction(value))
    except OverflowError:
        return inf if value > 0 else -inf


@contextmanager
def working_bits(bits: int) -> Iterator[None]:
    """Every ball operation inside works at ``bits`` bits."""
    before = ctx.prec
    ctx.prec = bits
    try:
        yield
    finally:
        ctx.prec = before


def ball(value: fmpq | int) -> arb:
    """A rational as a ball at the present working precision."""
    return arb(value)


def certified(compute: Callable[[], Result], enough: Callable[[Result], bool], what: str) -> Result:
    """``compute()`` at 128, 256, 512, ... bits, the first result that is ``enough``.

    Starts at the caller's working precision where that is higher.

    :raises Uncertified: naming ``what``, where 16384 bits do not suffice.
    """
    bits = max(LOWEST_BITS, ctx.prec)
    while bits <= HIGHEST_BITS:
        with working_bits(bits):
            result = compute()
            if enough(result):
                return result
        bits *= 2
    raise Uncertified(f"{what} could not be certified with {HIGHEST_BITS} bits of working precision")


def is_exactly_zero(value: arb | acb) -> bool:
    """Whether the ball is the point zero (not merely one that contains it)."""
    return bool(value.is_zero())


def accurate(value: arb | acb, bits: int) -> bool:
    """Whether a ball is exact, or known to ``bits`` bits relative to its own magnitude."""
    return bool(value.is_exact()) or int(value.rel_accuracy_bits()) >= bits


def vanishes(value: arb | acb) -> bool | None:
    """Whether a number is zero; None where the present working precision can't tell.

    A ball that still holds zero at 2048 bits is taken as zero: two descriptions that coincide.
    """
    if is_exactly_zero(value):
        return True
    if not value.contains(0):
        return False
    return True if ctx.prec >= COINCIDENCE_BITS else None


def decided_sign(compute: Callable[[], arb], what: str) -> int:
    """The sign (-1, 0, 1) of a real number; 0 only where a ball is the point zero.

    :raises Uncertified: where no working precision separates the number from zero.
    """
    value = certified(compute, lambda x: bool(x > 0) or bool(x < 0) or is_exactly_zero(x), what)
    return 1 if value > 0 else -1 if value < 0 else 0


def round_to_integer(compute: Callable[[], arb], what: str) -> int:
    """The nearest integer of a real number; an exact tie goes to even.

    The precision rises until the ball does not straddle a tie, so the integer is the same on every machine.  A ball
    that still holds a half-integer at 4096 bits is taken as that tie.
    """
    bits = max(LOWEST_BITS, ctx.prec)
    while True:
        with working_bits(bits):
            value = compute()
            rounded = (value + arb(0.5)).floor().unique_fmpz()
            if rounded is not None and not (value + arb(0.5)).contains_integer():
                return int(rounded)
            twice = (2 * value).unique_fmpz()
            if twice is not None and (value.is_exact() or bits >= 4096):
                tie = int(twice)
                if tie % 2 == 0:
                    return tie // 2
                lower = (tie - 1) // 2
                return lower if lower % 2 == 0 else lower + 1
        if bits >= HIGHEST_BITS:
            raise Uncertified(f"{what} could not be rounded with {HIGHEST_BITS} bits of working precision")
        bits *= 2


def mid_float(value: arb) -> float:
    """The midpoint as the nearest double, for plots, tables and labelled estimates only."""
    return float(value.mid())


def to_text(value: arb, digits: int = 17) -> str:
    """The ball's midpoint in decimal, ``digits`` significant digits, no radius."""
    return str(value.mid().str(digits, radius=False))
