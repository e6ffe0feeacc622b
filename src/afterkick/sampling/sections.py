"""A pulse transfer function as sections of order 1 and 2.

Poles nearest the unit circle choose first, each taking the zeros nearest to it; the cascade runs from the calmest
section to the most resonant one (common practice); an :class:`Arrangement` says otherwise.  Each section but the first
has gain 1 at z = 1, or at z = -1 where it has a zero at z = 1; the first carries the rest of the gain.
"""

from collections.abc import Sequence
from itertools import pairwise

from attrs import evolve, field, frozen
from flint import arb

from afterkick.numbers import mid_float
from afterkick.sampling.pulse_transfer import PulseTransfer, ZRoot, expanded

__all__ = ["NOTHING_LEFT", "Arrangement", "Roots", "Section", "in_order", "paired", "paired_by_rule", "same"]

NOTHING_LEFT = 2.0**-60
"""The part of its terms below which a sum is taken as zero where a section's scale is chosen."""

Roots = tuple[tuple[ZRoot, ...], tuple[ZRoot, ...]]
"""The poles and the zeros of one section."""


@frozen
class Section:
    """H = (b[0] + b[1]/z + b[2]/z^2) / (a[0] + a[1]/z + a[2]/z^2); a[0] is exactly 1."""

    b: tuple[arb, arb, arb]
    a: tuple[arb, arb, arb]
    b_at_one: arb = field(eq=False)
    """b[0] + b[1] + b[2], near z = 1 the number that decides the gain; the point zero for a zero at z = 1."""
    a_at_one: arb = field(eq=False)
    """1 + a[1] + a[2], likewise; the point zero for a pole at z = 1."""

    @b_at_one.default
    def _b_sum(self) -> arb:
        return self.b[0] + self.b[1] + self.b[2]

    @a_at_one.default
    def _a_sum(self) -> arb:
        return self.a[0] + self.a[1] + self.a[2]

    @property
    def order(self) -> int:
        """1 or 2."""
        return 1 if self.a[2].is_zero() and self.b[2].is_zero() else 2


@frozen
class Arrangement:
    """Which roots each section has, in the order of the cascade: numbers in the lists of :func:`in_order`."""

    poles: tuple[tuple[int, ...], ...]
    zeros: tuple[tuple[int, ...], ...]

    def roots(self, transfer: PulseTransfer) -> tuple[Roots, ...] | None:
        """The same at the precision of ``transfer``; None: more bits needed."""
        poles, zeros = in_order(transfer.poles), in_order(transfer.zeros)
        if poles is None or zeros is None:
            return None
        return tuple(
            (tuple(poles[i] for i in ours), tuple(zeros[i] for i in theirs))
            for ours, theirs in zip(self.poles, self.zeros, strict=True)
        )


def in_order(roots: Sequence[ZRoot]) -> list[ZRoot] | None:
    """By Re + Im/sqrt(2), which hardly any two have in common: the same order at every precision; None: more bits
    needed to tell two roots apart, or a pair from two real roots."""
    if any(not root.real and root.value.imag.contains(0) for root in roots):
        return None
    keyed = sorted(
        ((root.value.real + root.value.imag / arb(2).sqrt(), root) for root in roots),
        key=lambda each: each[0].mid(),
    )
    if any(low.overlaps(high) and not same(one, other) for (low, one), (high, other) in pairwise(keyed)):
        return None
    return [root for _, root in keyed]


def same(one: ZRoot, other: ZRoot) -> bool:
    """Whether two roots are one that is repeated."""
    if one.name is not None or other.name is not None:
        return one.name == other.name and one.real == other.real
    return one.real == other.real and bool(one.value.is_exact()) and bool(one.value == other.value)


def paired(transfer: PulseTransfer, arrangement: Arrangement | None = None) -> tuple[Section, ...] | None:
    """The sections, at the working precision ``transfer`` was computed with; None: more bits needed.

    Without an ``arrangement`` the rule decides.
    """
    cascade = paired_by_rule(transfer) if arrangement is None else arrangement.roots(transfer)
    if cascade is None:
        return None
    late = transfer.leading
    sections = []
    for group, taken in reversed(cascade):
        room = min(late, _degree(group) - _degree(taken))
        late -= room
        sections.append(_section(group, taken, room))
    assert late == 0, "a numerator of higher order than its denominator"
    scales = [_unit_scale(section) for section in sections]
    if any(scale.contains(0) or not scale.is_finite() for scale in scales):
        return None
    scales[-1] = transfer.gain
    for scale in scales[:-1]:
        scales[-1] /= scale
    return tuple(
        evolve(section, b=_three([value * scale for value in section.b]), b_at_one=section.b_at_one * scale)
        for section, scale in reversed(list(zip(sections, scales, strict=True)))
    )


def paired_by_rule(transfer: PulseTransfer) -> tuple[Roots, ...]:
    """Each section's poles and the zeros nearest to them, in the order of the cascade."""
    poles = _pole_groups(transfer.poles)
    zeros = sorted(transfer.zeros, key=_place)
    assigned: list[Roots] = []
    for index, group in enumerate(poles):
        pairs_to_place = sum(not zero.real for zero in zeros)
        later = sum(_degree(other) == 2 for other in poles[index + 1 :])
        taken = _nearest(group, zeros, must_take_pair=pairs_to_place > later)
        for zero in taken:
            zeros.remove(zero)
        assigned.append((group, tuple(taken)))
    assert not zeros, "a numerator of higher order than its denominator"
    return tuple(reversed(assigned))


def _degree(roots: Sequence[ZRoot]) -> int:
    return sum(root.degree for root in roots)


def _rounded(value: float) -> float:
    """Twelve digits: an order that does not depend on the working precision."""
    return float(f"{value:.11e}")


def _place(root: ZRoot) -> tuple[float, float]:
    return _rounded(mid_float(root.value.real)), _rounded(mid_float(root.value.imag))


def _calmness(root: ZRoot) -> tuple[float, float, float]:
    return (-_rounded(mid_float(abs(root.value))), *_place(root))


def _pole_groups(poles: Sequence[ZRoot]) -> list[tuple[ZRoot, ...]]:
    """Pairs, and real poles two by two; the most resonant first, a single real pole as it comes."""
    real = sorted((pole for pole in poles if pole.real), key=_calmness)
    groups: list[tuple[ZRoot, ...]] = [(pole,) for pole in poles if not pole.real]
    groups += [tuple(real[i : i + 2]) for i in range(0, len(real), 2)]
    return sorted(groups, key=lambda group: _calmness(group[0]))


def _distance(zero: ZRoot, group: Sequence[ZRoot]) -> tuple[float, float, float]:
    return (_rounded(mid_float(abs(zero.value - group[0].value))), *_place(zero))


def _nearest(group: Sequence[ZRoot], zeros: Sequence[ZRoot], must_take_pair: bool) -> list[ZRoot]:
    room = _degree(group)
    ordered = sorted(zeros, key=lambda zero: _distance(zero, group))
    if room == 2:
        pairs = [zero for zero in ordered if not zero.real]
        if pairs and (must_take_pair or not ordered[0].real):
            return pairs[:1]
    return [zero for zero in ordered if zero.real][:room]


def _section(poles: Sequence[ZRoot], zeros: Sequence[ZRoot], late: int) -> Section:
    a = expanded(poles)
    b = [arb(0)] * late + expanded(zeros)
    return Section(_three(b), _three(a), _at_one(zeros), _at_one(poles))


def _at_one(roots: Sequence[ZRoot]) -> arb:
    """prod(1 - root), which a root at exactly 1 makes exactly zero."""
    product = arb(1)
    for root in roots:
        product *= sum(root.factor(), arb(0))
    return product


def _three(values: Sequence[arb]) -> tuple[arb, arb, arb]:
    first, second, third = [*values, arb(0), arb(0)][:3]
    return first, second, third


def _unit_scale(section: Section) -> arb:
    """What brings the gain at z = 1, or at z = -1 where a zero or pole is at 1, to one."""
    b, a = section.b, section.a
    for top, bottom in ((section.b_at_one, section.a_at_one), (b[0] - b[1] + b[2], a[0] - a[1] + a[2])):
        if not (_nothing_left(top, b) or _nothing_left(bottom, a)):
            return bottom / top
    return arb(1)


def _nothing_left(total: arb, group: Sequence[arb]) -> bool:
    """Whether a sum is zero as far as a choice of scale is concerned; the product of the sections stays exact."""
    return bool(abs(total) < sum((abs(value) for value in group), arb(0)) * arb(NOTHING_LEFT))
