"""What one section of a cascade may take of a filter's poles, or of its zeros, and what is left then.

Values are doubles, accurate near the unit circle: they serve estimates.
"""

import math
from collections.abc import Sequence
from functools import cached_property
from itertools import combinations_with_replacement, product

import numpy as np
from attrs import evolve, frozen
from numpy.typing import NDArray

from afterkick.numbers import mid_float
from afterkick.sampling.pulse_transfer import ZRoot
from afterkick.sampling.sections import NOTHING_LEFT, same

__all__ = ["MOST_STATES", "RootOptions"]

MOST_STATES = 256
"""Roots are taken one by one as long as the product of (times + 1) over all that differ is no more."""

Floats = NDArray[np.float64]
Whole = NDArray[np.int64]
Kinds = tuple[int, ...]


@frozen(eq=False)
class RootOptions:
    """All poles or all zeros, and what one section may take of them.

    A state says how many of each unit are taken; it is a number in the mixed radix of ``times`` + 1.
    """

    kinds: tuple[ZRoot, ...]
    """Those that differ."""
    starts: tuple[int, ...]
    """The place of the first of each kind in the order of all."""
    units: tuple[Kinds, ...]
    """Kinds that stay together."""
    times: tuple[int, ...]
    """How many there are of each unit."""
    options: tuple[tuple[int, ...], ...]
    """Units, for one section."""

    @classmethod
    def of(cls, roots: Sequence[ZRoot], rule: Sequence[Sequence[ZRoot]], grouped: bool = False) -> "RootOptions":
        """Of roots in order: ``grouped`` as by the rule, a group for each section; or one by one unless these are too
        many, and any section may go without."""
        starts = [i for i, root in enumerate(roots) if i == 0 or not same(roots[i - 1], root)]
        own = cls(tuple(roots[i] for i in starts), tuple(starts), (), (), ())
        groups = [group for group in map(own.kinds_of, rule) if group]
        singles = [(kind,) for group in groups for kind in group]
        single = not grouped and math.prod(singles.count(one) + 1 for one in set(singles)) <= MOST_STATES
        listed = sorted(singles if single else groups)
        units = tuple(dict.fromkeys(listed))
        options: list[tuple[int, ...]] = [] if grouped else [()]
        options += [(unit,) for unit in range(len(units))]
        if single:
            real = [unit for unit, (kind,) in enumerate(units) if own.kinds[kind].real]
            options += combinations_with_replacement(real, 2)
        return evolve(own, units=units, times=tuple(map(listed.count, units)), options=tuple(options))

    def kinds_of(self, roots: Sequence[ZRoot]) -> Kinds:
        """What each root is, sorted."""
        return tuple(
            sorted(next(i for i, kind in enumerate(self.kinds) if kind is one or same(kind, one)) for one in roots)
        )

    def option_of(self, roots: Sequence[ZRoot]) -> int:
        """The number of the option that consists of these."""
        return self.taken.index(self.kinds_of(roots))

    def places(self, path: Sequence[int]) -> tuple[tuple[int, ...], ...]:
        """The places of the roots that the options of a path take, in the order of all."""
        free = list(self.starts)
        found = []
        for option in path:
            places = []
            for kind in self.taken[option]:
                places.append(free[kind])
                free[kind] += 1
            found.append(tuple(places))
        return tuple(found)

    @cached_property
    def taken(self) -> tuple[Kinds, ...]:
        """The kinds of each option."""
        return tuple(tuple(sorted(kind for unit in option for kind in self.units[unit])) for option in self.options)

    @cached_property
    def degrees(self) -> tuple[int, ...]:
        """Of each option."""
        return tuple(sum(self.kinds[kind].degree for kind in taken) for taken in self.taken)

    @property
    def states(self) -> int:
        """How many there are."""
        return math.prod(times + 1 for times in self.times)

    @cached_property
    def counts(self) -> Whole:
        """How many of each unit are taken: one row a state."""
        return np.array(list(product(*(range(times + 1) for times in self.times))), dtype=np.int64)

    @cached_property
    def after(self) -> Whole:
        """The state that an option leads to, one row an option; the number of states where it can't be had."""
        states, sizes = self.states, np.array(self.times, dtype=np.int64) + 1
        strides = np.cumprod([1, *sizes[::-1]])[-2::-1]
        units = range(len(sizes))
        more = np.array([[option.count(unit) for unit in units] for option in self.options], dtype=np.int64)
        fits = np.all(self.counts + more[:, None] < sizes, axis=2)
        return np.where(fits, np.arange(states) + (more @ strides)[:, None], states)

    @cached_property
    def state_degrees(self) -> Whole:
        """Of each state."""
        degrees = [sum(self.kinds[kind].degree for kind in unit) for unit in self.units]
        found: Whole = np.dot(self.counts, np.array(degrees, dtype=np.int64))
        return found

    @cached_property
    def at_ends(self) -> tuple[Floats, NDArray[np.bool_]]:
        """log2 of each option's magnitude at z = 1 and -1, and whether nothing is left of it there."""
        ends = [self._power_log2(kind, np.array([0.0, math.pi])) / 2.0 for kind in range(len(self.kinds))]
        found = np.array([sum((ends[kind] for kind in taken), np.zeros(2)) for taken in self.taken])
        sizes = np.array([np.sum(np.abs(self.polynomial(option))) for option in range(len(self.options))])
        return found, found < np.log2(sizes * NOTHING_LEFT)[:, None]

    @cached_property
    def polar(self) -> tuple[tuple[float, float], ...]:
        """1 - |root| and the angle of each kind."""
        return tuple((mid_float(1 - abs(kind.value)), abs(mid_float(kind.value.arg()))) for kind in self.kinds)

    def power_log2(self, angles: Floats) -> Floats:
        """log2 of |product of (1 - root/z)|^2 at z = e^(j angle), over the roots of a state: one row each."""
        rows = [self._power_log2(kind, angles) for kind in range(len(self.kinds))]
        units = [np.sum([rows[kind] for kind in unit], axis=0) for unit in self.units]
        found: Floats = np.dot(self.counts, np.array(units).reshape(len(units), len(angles)))
        return found

    def _power_log2(self, kind: int, angles: Floats) -> Floats:
        # |1 - r e^(j x)|^2 = (1 - r)^2 + 4 r sin^2(x/2), which keeps its digits near the root
        slack, angle = self.polar[kind]
        found = np.zeros_like(angles)
        for side in (1,) if self.kinds[kind].real else (1, -1):
            square = slack * slack + 4.0 * (1.0 - slack) * np.sin((angles - side * angle) / 2.0) ** 2
            found += np.log2(np.maximum(square, np.finfo(np.float64).tiny))
        return found

    def polynomial(self, option: int) -> tuple[float, float, float]:
        """The product of (1 - root/z) of an option, in powers of 1/z."""
        product = np.ones(1)
        for kind in self.taken[option]:
            slack, angle = self.polar[kind]
            radius = 1.0 - slack
            real = self.kinds[kind].real
            factor = (1.0, -radius * math.cos(angle)) if real else (1.0, -2 * radius * math.cos(angle), radius**2)
            product = np.convolve(product, factor)
        first, second, third = [*product.tolist(), 0.0, 0.0][:3]
        return first, second, third
