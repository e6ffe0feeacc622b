"""Which zeros go with which poles, and in what order: the arrangement with the least estimated rounding noise.

Section k rounds its output, scaled by 2^-e_k, once.  In the direct cascade that rounding reaches the output as
2^e_k / A_k times the sections behind it, so the noise power is, with a twelfth of a squared last place each,

    sum over k of 4^e_k * || (H_(k+1) ... H_n) / A_k ||^2,   2^e_k >= peak * || H_1 ... H_k ||

where the first norm is the root of squares and the second the one that the scaling goes by.  Both depend on which roots
have gone before and not on their order among themselves: so the least sum is a shortest path, from no root to all of
them, and found as such.  Source of the sum: L. B. Jackson, "Roundoff-noise analysis for fixed-point digital filters
realized in cascade or parallel form", 1970.

All of it is an estimate in double precision that chooses and proves nothing.  Numbers are rounded before they are
compared, so that the last bits of a library's arithmetic don't decide, and of equals the first is taken.
"""

import math
from collections import Counter
from collections.abc import Sequence
from functools import cached_property
from itertools import combinations_with_replacement
from typing import TYPE_CHECKING

import numpy as np
from attrs import evolve, field, frozen
from flint import arb
from numpy.typing import NDArray

from afterkick.fixed.scaling import FloatSection, norm_logarithms
from afterkick.numbers import is_exactly_zero, mid_float, nearest_float, working_bits
from afterkick.sampling.pulse_transfer import PulseTransfer, ZRoot
from afterkick.sampling.sections import NOTHING_LEFT, Arrangement, Roots, in_order, paired_by_rule, same

if TYPE_CHECKING:
    from afterkick.design.schema import Arithmetic, Signals
    from afterkick.sampling.sampled import Sampled

__all__ = ["Arranged", "arranged"]

WORTHWHILE = 0.05
"""The part of the noise that must be gained."""
MOST_STATES = 256
"""Of poles or zeros: the product of (times + 1) over all that differ."""
ROUNDS = 8
"""In which norms on a grid are replaced by those the scaling takes."""
WORK_OF_ROUNDS = 4e4
SEGMENT = 256
"""As in scaling, where the norm is good enough for an estimate."""
SPACING = 0.2
"""Of the grid, relative to the distance from the nearest pole."""
DECIMALS = 3
"""Of logarithms to base 2 that are compared."""
BITS = 128

Floats = NDArray[np.float64]
Unit = tuple[ZRoot, ...]
Path = list[tuple[int, int]]
"""The state of poles and zeros after each section."""


@frozen
class Arranged:
    """A sampled filter and what its arrangement does to the rounding noise of a direct cascade."""

    sampled: "Sampled"
    noise_by_rule: float
    """Estimate, in output counts r.m.s., of the arrangement by the rule."""
    noise: float
    """Estimate, of that of ``sampled``."""


def arranged(sampled: "Sampled", arithmetic: "Arithmetic", signals: "Signals") -> Arranged | None:
    """``sampled`` with the arrangement that has the least estimated noise; None where the rule's is as good, or nothing
    can be judged: a single section, a filter that is not stable, too many roots."""
    if not sampled.stable:
        return None
    with working_bits(BITS), np.errstate(all="ignore"):
        transfer = sampled.transfer(BITS)
        rule = paired_by_rule(transfer)
        orders = in_order(transfer.poles), in_order(transfer.zeros)
        if len(rule) == 1 or None in orders or is_exactly_zero(transfer.gain):
            return None
        search = _Search.of(transfer, rule, arithmetic, signals)
        if search is None:
            return None
        before = search.noise_log2(search.path(rule))
        best = search.best()
        after = search.noise_log2(best)
        # not where either is not a number
        if not before - after > math.log2(1 + WORTHWHILE):
            return None
        cascade = search.cascade(best)
    poles, zeros = (_Numbers(order) for order in orders if order is not None)
    arrangement = Arrangement(
        tuple(poles.taken(ours) for ours, _ in cascade), tuple(zeros.taken(theirs) for _, theirs in cascade)
    )
    return Arranged(evolve(sampled, arrangement=arrangement), 2.0**before, 2.0**after)
