"""Which zeros go with which poles, and in what order: the arrangement with the least estimated rounding noise.

Section k of n rounds its output, scaled by 2^-e_k, once.  In the direct cascade that rounding reaches the output as
2^e_k / A_k times the sections behind it.  So the noise power is, in squared last places,

    1/12 * sum over k of 4^e_k || (H_(k+1) ... H_n) / A_k ||^2  with  2^e_k >= peak * || H_1 ... H_k ||,  e_n = 0

where the first norm is the root of squares and the second the one that the scaling goes by.  Both depend on which roots
have gone before, not on how they were put together: so the least sum is a shortest path from no root to all of them.
Source of the sum: L. B. Jackson, "Roundoff-noise analysis for fixed-point digital filters realized in
cascade or parallel form", IEEE Transactions on Audio and Electroacoustics 18(2), 1970.

These are estimates in double precision, which choose and prove nothing.  Numbers are rounded before they are compared,
so that the last bits of a library's arithmetic don't decide; the first of equals is taken.
"""

import math
from collections.abc import Sequence
from functools import cached_property
from typing import TYPE_CHECKING, Any

import numpy as np
from attrs import evolve, frozen
from flint import arb
from numpy.typing import NDArray

from afterkick.fixed.root_options import MOST_STATES, RootOptions
from afterkick.fixed.scaling import FloatSection, norm_logarithms
from afterkick.numbers import is_exactly_zero, mid_float, working_bits
from afterkick.sampling.sections import Arrangement, Roots, in_order, paired_by_rule

if TYPE_CHECKING:
    from afterkick.design.schema import Arithmetic, Signals
    from afterkick.sampling.sampled import Sampled

__all__ = ["Arranged", "arranged"]

WORTHWHILE = 0.05
"""How much of the noise must be gained."""
ROOM = 0.07
"""A word that a signal fills but for a twentieth, or less, counts as one that it does not fit: log2 of that."""
LEAST_ROUNDS = 3
WORK = 600
"""Divided by the third power of the number of sections: how often a path is searched for."""
SPACING = 0.2
"""Of the grid of frequencies, relative to the distance from the nearest pole."""
NARROWEST = 1e-12
DECIMALS = 3
"""Of the logarithms to base 2 that are compared."""
BITS = 128

Floats = NDArray[np.float64]
Path = tuple[tuple[int, int], ...]
"""Of each section the option of its poles and that of its zeros."""


@frozen
class Arranged:
    """A sampled filter in an arrangement of its own, and what that does to the rounding noise of a direct cascade."""

    sampled: "Sampled"
    noise_by_rule: float
    """Estimate, in output counts r.m.s., of the arrangement by the rule."""
    noise: float
    """Estimate, of this one."""


def arranged(sampled: "Sampled", arithmetic: "Arithmetic", signals: "Signals") -> Arranged | None:
    """``sampled``, which has the rule's arrangement, in the one with the least estimated noise.

    None where that gains nothing worth the name, and where nothing can be judged: without a norm between the sections,
    of a filter that is not stable, or has too many roots.
    """
    if arithmetic.scaling == "none" or not sampled.stable:
        return None
    with working_bits(BITS), np.errstate(all="ignore"):
        transfer = sampled.transfer(BITS)
        rule = paired_by_rule(transfer)
        poles, zeros = in_order(transfer.poles), in_order(transfer.zeros)
        if len(rule) == 1 or poles is None or zeros is None or is_exactly_zero(transfer.gain):
            return None
        search = _Search(
            RootOptions.of(poles, [ours for ours, _ in rule], grouped=True),
            RootOptions.of(zeros, [theirs for _, theirs in rule]),
            arithmetic.scaling,
            arithmetic.carry,
            _log2(abs(transfer.gain) * (signals.input.peak_or_full_scale / signals.input.full_scale)),
            _log2(arb(signals.input.full_scale / signals.output.full_scale)),
        )
        if max(search.poles.states, search.zeros.states) > MOST_STATES:
            return None
        best = search.best()
        if best is None:
            return None
        before, after = (float(np.exp2(search.noise_log2(path))) for path in (search.path(rule), best))
        if not 0.0 < after * (1.0 + WORTHWHILE) < before < math.inf:
            return None
        ours, theirs = zip(*best, strict=True)
        arrangement = Arrangement(search.poles.places(ours), search.zeros.places(theirs))
        return Arranged(evolve(sampled, arrangement=arrangement), before, after)


def _log2(value: arb) -> float:
    return mid_float(value.log() / arb(2).log())


@frozen(eq=False)
class _Search:
    """The arrangements of one filter."""

    poles: RootOptions
    zeros: RootOptions
    scaling: str
    carry: int
    gain_log2: float
    """Of the filter, times the peak of the input relative to its full scale."""
    ratio_log2: float
    """Of the input's full scale to the output's."""

    def path(self, cascade: Sequence[Roots]) -> Path:
        """That of given sections."""
        return tuple((self.poles.option_of(ours), self.zeros.option_of(theirs)) for ours, theirs in cascade)

    def best(self) -> Path | None:
        """The path with the least noise that was found; None where doubles can't hold the norms.

        Norms on a grid are lower bounds, or nearly so; along the shortest path they give way to better ones.  The path
        that stays is the shortest, but that takes long.  So at first all others are raised by as much as the better
        ones were larger on the average, until that finds no new path.
        """
        grid, sections = self._norms_on_grid, sum(self.poles.times)
        norms, known = grid.copy(), np.zeros(grid.shape, dtype=np.bool_)
        raising = True
        found: list[Path] = []
        for _ in range(max(LEAST_ROUNDS, WORK // sections**3)):
            more = np.mean((norms - grid)[known]) if raising and np.any(known) else 0.0
            path = self._shortest(np.where(known, norms, grid + more))
            if path is None or not np.all(np.isfinite(self._norms_along(path))):
                return None
            if path not in found:
                found.append(path)
                for state, norm in zip(self._states(path), self._norms_along(path), strict=False):
                    norms[state], known[state] = norm, True
            elif raising:
                raising = False
            else:
                break
        return min(found, key=lambda path: self.noise_log2(path, ROOM))

    def noise_log2(self, path: Path, room: float = 0.0) -> float:
        """log2 of the r.m.s. of the rounding noise at the output, in counts; the norms are taken larger by ``room``."""
        states, scales = self._states(path), [self._scales[pair] for pair in path]
        weights = [
            self._weight(norm + room, sum(scales[k:])) for k, norm in enumerate(self._norms_along(path), start=1)
        ]
        poles = [0, *(ours for ours, _ in states)]
        powers = [
            2.0 * weight + self._tails[before, theirs]
            for weight, before, (_, theirs) in zip([*weights, 0.0], poles, states, strict=False)
        ]
        return round(float(np.logaddexp2.reduce(powers) - math.log2(12.0)) / 2.0, DECIMALS)

    def _states(self, path: Path) -> list[tuple[int, int]]:
        """Of the poles and of the zeros, after each section."""
        state, found = (0, 0), []
        for ours, theirs in path:
            state = int(self.poles.after[ours, state[0]]), int(self.zeros.after[theirs, state[1]])
            found.append(state)
        return found

    def _norms_along(self, path: Path) -> list[float]:
        """log2 of the norm of the response to each section's output but the last one's, without any gain."""
        if path not in self._known:
            sections = []
            for ours, theirs in path[:-1]:
                _, a1, a2 = self.poles.polynomial(ours)
                sections.append(FloatSection(self.zeros.polynomial(theirs), (a1, a2), 0))
            found = norm_logarithms(sections, self.scaling)
            self._known[path] = [math.inf if norm is None else norm for norm in found]
        return self._known[path]

    @cached_property
    def _known(self) -> dict[Path, list[float]]:
        return {}

    def _weight(self, norm: Floats | float, behind: Floats | float) -> Any:
        """log2 of what the rounding of a section's output counts, times the scales of the sections ``behind`` it."""
        return np.ceil(np.round(self.gain_log2 + norm - behind, DECIMALS)) + behind + self.ratio_log2

    def _shortest(self, norms: Floats) -> Path | None:
        """The least of :meth:`noise_log2`, from the last section to the first, for all states of a depth at once.

        None where that is no number.  Sections behind may have several scales; those of the cheaper way on count.
        """
        poles, zeros = self.poles, self.zeros
        shape = len(poles.counts) + 1, len(zeros.counts) + 1  # the last row and column: what can't be had
        cost, behind = np.full(shape, np.inf), np.zeros(shape)
        cost[-2, -2] = -np.inf
        norms = np.pad(norms, (0, 1))
        tails = np.pad(self._tails, (0, 1))
        choice = np.zeros((*shape, 2), dtype=np.int64)
        usable = np.flatnonzero(np.any(self._may_join, axis=0))
        barred = np.where(self._may_join[:, usable], 0.0, np.inf)[:, None, :, None]
        depths = poles.counts.sum(axis=1)
        for depth in reversed(range(depths[-1])):
            rows = np.flatnonzero(depths == depth)
            spare = poles.state_degrees[rows, None] - zeros.state_degrees
            columns = np.flatnonzero(np.any((spare >= 0) & (spare <= self._slack), axis=0))
            then, after = poles.after[:, rows], zeros.after[np.ix_(usable, columns)]
            weight = self._weight(norms[then] + ROOM, behind[then]) if depth < depths[-1] - 1 else 0.0
            total = np.round(np.logaddexp2(cost[then], 2.0 * weight + tails[rows]), DECIMALS)
            reached = (total[:, :, after] + barred).transpose(1, 3, 0, 2).reshape(len(rows), len(columns), -1)
            ours, theirs = np.divmod(np.argmin(reached, axis=2), len(after))
            at = np.ix_(rows, columns)
            cost[at] = np.min(reached, axis=2)
            before = then[ours, np.arange(len(rows))[:, None]], after[theirs, np.arange(len(columns))]
            theirs = usable[theirs]
            choice[at] = np.stack([ours, theirs], axis=2)
            behind[at] = behind[before] + self._scales[ours, theirs]
        if not math.isfinite(cost[0, 0]):
            return None
        state, path = (0, 0), []
        for _ in range(depths[-1]):
            ours, theirs = choice[state].tolist()
            path.append((ours, theirs))
            state = int(poles.after[ours, state[0]]), int(zeros.after[theirs, state[1]])
        return tuple(path)

    @cached_property
    def _slack(self) -> int:
        """By how much the poles outnumber the zeros."""
        return int(self.poles.state_degrees[-1] - self.zeros.state_degrees[-1])

    @cached_property
    def _may_join(self) -> NDArray[np.bool_]:
        """Whether a section may have an option of the poles and one of the zeros."""
        spare = np.array(self.poles.degrees)[:, None] - np.array(self.zeros.degrees)
        found: NDArray[np.bool_] = (spare >= 0) & (spare <= self._slack)
        return found

    @cached_property
    def _scales(self) -> Floats:
        """log2 of what gives a section the gain 1 at z = 1, or at z = -1, for all options of its poles and zeros."""
        bottom, no_bottom = self.poles.at_ends
        top, no_top = self.zeros.at_ends
        found = np.zeros((len(bottom), len(top)))
        for end in (1, 0):
            lost = no_bottom[:, None, end] | no_top[None, :, end]
            found = np.where(lost, found, bottom[:, None, end] - top[None, :, end])
        return found

    @cached_property
    def _angles(self) -> Floats:
        """From 0 to pi, about SPACING times the distance from the nearest pole apart."""
        lines = np.array([max(kind[0], NARROWEST) for kind in self.poles.polar])[:, None]
        angles = np.array([kind[1] for kind in self.poles.polar])[:, None]
        offsets = lines * np.sinh(np.arange(0.0, math.asinh(math.pi / NARROWEST), SPACING))
        every = np.concatenate([(angles - offsets).ravel(), (angles + offsets).ravel(), [0.0, math.pi]])
        every = np.unique(every[(every >= 0.0) & (every <= math.pi)])
        density = 1.0 / np.min(np.hypot(lines, every - angles), axis=0)
        reached = np.concatenate([[0.0], np.cumsum(np.diff(every) * (density[1:] + density[:-1]) / 2.0)])
        count = math.ceil(reached[-1] / SPACING) + 1
        found: Floats = np.interp(np.linspace(0.0, reached[-1], count), reached, every)
        return found

    @cached_property
    def _weights(self) -> Floats:
        """Of the mean over all angles, by the trapezoidal rule."""
        steps = np.diff(self._angles) / math.pi
        found: Floats = (np.append(steps, 0.0) + np.append(0.0, steps)) / 2.0
        return found

    @cached_property
    def _powers(self) -> tuple[Floats, Floats, Floats]:
        """|1/A|^2 and |B|^2 of each state on the grid, the largest of each 1, and log2 of what both are in units of."""
        poles, zeros = -self.poles.power_log2(self._angles), self.zeros.power_log2(self._angles)
        sizes = [np.max(side, axis=1) for side in (poles, zeros)]
        return (
            np.exp2(poles - sizes[0][:, None]),
            np.exp2(zeros - sizes[1][:, None]),
            sizes[0][:, None] + sizes[1],
        )

    @cached_property
    def _tails(self) -> Floats:
        """log2 of ||B/A||^2 with the poles and the zeros that are not taken yet, for all states of both."""
        poles, zeros, sizes = self._powers
        shaped = self._weights * (2.0 * np.sin(self._angles / 2.0)) ** (2 * self.carry)
        found: Floats = (np.log2((poles * shaped) @ zeros.T) + sizes)[::-1, ::-1]
        return found

    @cached_property
    def _norms_on_grid(self) -> Floats:
        """log2 of the norm of B/A, of those that are taken."""
        poles, zeros, sizes = self._powers
        if self.scaling == "two-norm":
            found: Floats = (np.log2((poles * self._weights) @ zeros.T) + sizes) / 2.0
            return found
        found = np.full(sizes.shape, np.inf)
        for row, degree in enumerate(self.poles.state_degrees):
            spare = degree - self.zeros.state_degrees
            columns = np.flatnonzero((spare >= 0) & (spare <= self._slack))
            found[row, columns] = (np.log2(np.max(poles[row] * zeros[columns], axis=1)) + sizes[row, columns]) / 2.0
        return found
