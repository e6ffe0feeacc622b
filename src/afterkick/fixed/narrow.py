"""The one owner of the rounding, shift and overflow rules, for Python integers and numpy int64 arrays alike.

The C of ``templates/c`` spells the same rules; the tests hold the two together integer for integer.
"""

from typing import TypeVar

import numpy as np
from numpy.typing import NDArray

from afterkick.fixed.program import Overflow, Rounding

__all__ = ["clamp", "fit", "residue_limits", "rounding_offset", "saturate", "shift_right", "wrap"]

Value = TypeVar("Value", int, NDArray[np.int64])


def rounding_offset(right_shift: int, rounding: Rounding) -> int:
    """The largest amount that the rule adds to a sum before it drops the ``right_shift`` lowest bits."""
    return 0 if right_shift == 0 or rounding is Rounding.FLOOR else 1 << (right_shift - 1)


def shift_right(value: Value, right_shift: int, rounding: Rounding) -> Value:
    """``value * 2^-right_shift`` as an integer, by the rule; ``value`` plus the offset must not overflow."""
    if right_shift == 0:
        return value
    if rounding is Rounding.FLOOR:
        return value >> right_shift
    half = 1 << (right_shift - 1)
    if rounding is Rounding.NEAREST:
        return (value + half) >> right_shift
    return (value + (half - 1) + ((value >> right_shift) & 1)) >> right_shift


def residue_limits(right_shift: int, rounding: Rounding) -> tuple[int, int]:
    """The lowest and highest of value - (quotient << right_shift): what the shift drops."""
    if right_shift == 0:
        return 0, 0
    if rounding is Rounding.FLOOR:
        return 0, (1 << right_shift) - 1
    half = 1 << (right_shift - 1)
    # A tie to even is rounded either way.
    return -half, half if rounding is Rounding.EVEN else half - 1


def clamp(value: Value, limits: tuple[int, int]) -> Value:
    """The nearest value from limits[0] to limits[1]."""
    lowest, highest = limits
    if isinstance(value, int):
        return min(max(value, lowest), highest)
    return np.minimum(np.maximum(value, lowest), highest)


def saturate(value: Value, bits: int) -> Value:
    """The nearest value that a word of ``bits`` bits holds."""
    return clamp(value, (-(1 << (bits - 1)), (1 << (bits - 1)) - 1))


def wrap(value: Value, bits: int) -> Value:
    """``value`` modulo 2^bits, in two's complement; ``bits`` is at most 63 for numpy values."""
    low = value & ((1 << bits) - 1)
    return low - ((low & (1 << (bits - 1))) << 1)


def fit(value: Value, bits: int, overflow: Overflow) -> Value:
    """What a word of ``bits`` bits holds after ``value`` is stored in it."""
    return saturate(value, bits) if overflow is Overflow.SATURATE else wrap(value, bits)
