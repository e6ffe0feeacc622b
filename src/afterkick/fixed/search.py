"""The choice of integers: the lattice points near the exact coefficients with the smallest impulse error.

The impulse error is max |h_q - h_d| over the samples: the response that the integers realise, before any rounding of
signals, against the exact sampled one.  About a point it is nearly linear in the coordinates of the lattices.  So the
nearest points of weighted least-squares problems are enumerated (a K-best search on the triangular form), the weights
leaning more and more on the worst samples (Lawson's rule for the Chebyshev norm); steps of one and two coordinates are
tried from there; and what looks best is evaluated in full.

Every comparison is of numbers that are the same on every machine (see pulse_grid), and the first of equals is taken.
"""

from collections.abc import Callable, Sequence

import numpy as np
from attrs import field, frozen
from flint import fmpq

from afterkick.fixed.kept import Lattice, Share, handed_over, lattice, shares
from afterkick.fixed.pulse_grid import Floats, Grid, Integers, exact_pulse, pulses, total, transient_samples
from afterkick.fixed.quantise import PROBE_BITS, ExactSection
from afterkick.numbers import working_bits

__all__ = ["Acceptable", "searched"]

DENSE, EACH = 96, 32
ROUNDS = 6
WORTHWHILE = 0.97
"""The factor by which a round must lower the error to be followed by another, and all together to be taken."""
WEIGHTINGS = 3
LEAST_WEIGHT = 0.05
BEAM = 32
OPTIONS = np.arange(-2.0, 3.0)
FARTHEST = 4096.0
PAIR_STEPS = 3
TRIED, TRIED_NEAR = 8, 4
DEPENDENT = 1e-13
"""A column of which the others leave this part of its square has no direction of its own."""

Point = tuple[int, ...]
Acceptable = Callable[[ExactSection, Integers], bool]


def searched(
    sections: Sequence[ExactSection], plain: Sequence[Integers], dc_gain: fmpq | None, acceptable: Acceptable
) -> tuple[tuple[ExactSection, Integers], ...]:
    """The sections, with the gains they now have, and their integers.

    ``plain`` are the nearest integers, whose binary points are kept where possible.  ``dc_gain`` is the exact gain of
    the whole at z = 1, scaling included, where it is known.
    """
    points = [(one.b_bits, one.a_bits) for one in plain]
    parts = shares(sections, dc_gain)
    tight = [_usable(*each, acceptable) for each in zip(*handed_over(sections, points, parts), points, strict=True)]
    space = _Space(
        tuple(one for one in tight if one is not None)
        if None not in tight
        else tuple(_loosened(*each, acceptable) for each in zip(sections, parts, points, strict=True))
    )
    chosen = space.integers(_improved(space, acceptable))
    return tuple((one.section, integers) for one, integers in zip(space.lattices, chosen, strict=True))


def _usable(
    section: ExactSection, share: Share | None, point: tuple[int, int], acceptable: Acceptable
) -> Lattice | None:
    """The lattice with the most fraction bits of the numerator, at most two fewer, whose start is acceptable."""
    b_bits, a_bits = point
    for drop in range(3):
        found = lattice(section, b_bits - drop, a_bits, share)
        if found is not None and acceptable(section, found.integers(found.start)):
            return found
    return None


def _loosened(section: ExactSection, share: Share | None, point: tuple[int, int], acceptable: Acceptable) -> Lattice:
    """The same with what can be had of the share: all, nearly all, nothing; the nearest integers start the last."""
    near = None if share is None else Share(share.value, False)
    for part in (share, near, None):
        found = _usable(section, part, point, acceptable)
        if found is not None:
            return found
    found = lattice(section, *point, None)
    assert found is not None
    return found


@frozen(eq=False)
class _Space:
    """The lattices of all sections as one, and the exact response."""

    lattices: tuple[Lattice, ...]
    b_scales: tuple[int, ...] = field(init=False)
    """Numerators are divided by 2 to this power, which brings them below 1."""
    grid: Grid = field(init=False)
    exact: Floats = field(init=False)

    @b_scales.default
    def _b_scales(self) -> tuple[int, ...]:
        return tuple(max(map(abs, one.b)).bit_length() for one in self.integers(self.start))

    @grid.default
    def _grid(self) -> Grid:
        return Grid.over(transient_samples(self.integers(self.start)), DENSE, EACH)

    @exact.default
    def _exact(self) -> Floats:
        peak = float(np.max(np.abs(self.responses([self.start]))))
        exponent = 52 - int(np.frexp(peak)[1])
        gain = fmpq(2) ** exponent
        for one, scale in zip(self.lattices, self.b_scales, strict=True):
            gain *= one.section.gain * fmpq(2) ** (one.b_bits - scale)
        with working_bits(PROBE_BITS):
            found: Floats = exact_pulse(self.lattices[0].section.sampled, gain, self.grid) * 2.0**-exponent
        return found

    @property
    def start(self) -> Point:
        """The coordinates nearest to the exact coefficients."""
        return tuple(x for one in self.lattices for x in one.start)

    def integers(self, point: Point) -> tuple[Integers, ...]:
        """The sections at a point."""
        rest = iter(point)
        return tuple(one.integers([next(rest) for _ in one.start]) for one in self.lattices)

    def responses(self, points: Sequence[Point]) -> Floats:
        """On the grid, one row a point."""
        cases = [self.integers(point) for point in points]
        b = np.array([[one.b for one in case] for case in cases], dtype=np.float64)
        a = np.array([[one.a[1:] for one in case] for case in cases], dtype=np.float64)
        b *= np.array([2.0**-scale for scale in self.b_scales])[:, None]
        a *= np.array([2.0**-one.a_bits for one in self.lattices])[:, None]
        return pulses(b, a, self.grid)

    def errors(self, points: Sequence[Point]) -> Floats:
        """Of the responses."""
        return self.responses(points) - self.exact


def _improved(space: _Space, acceptable: Acceptable) -> Point:
    """The start, or a point that is better by a margin."""
    start = best = space.start
    if not start:
        return start
    # Far points may be unstable and their responses overflow; what is not a number is never smaller.
    with np.errstate(all="ignore"):
        error = space.errors([start])[0]
        first = size = float(_sizes(error))
        for _ in range(ROUNDS):
            before = size
            slopes = space.errors([(*best[:i], best[i] + 1, *best[i + 1 :]) for i in range(len(best))]) - error
            slopes[~np.all(np.isfinite(slopes), axis=1)] = 0.0
            points = [tuple(x + step for x, step in zip(best, move, strict=True)) for move in _moves(error, slopes)]
            errors = space.errors(points)
            sizes = _sizes(errors)
            for index in np.argsort(sizes, kind="stable"):
                if not sizes[index] < size:
                    break
                point = points[index]
                if all(acceptable(*each) for each in _sections_at(space, point)):
                    best, error, size = point, errors[index], float(sizes[index])
                    break
            if not size < WORTHWHILE * before:
                break
    return best if size < WORTHWHILE * first else start


def _sections_at(space: _Space, point: Point) -> list[tuple[ExactSection, Integers]]:
    return [(one.section, found) for one, found in zip(space.lattices, space.integers(point), strict=True)]


def _sizes(errors: Floats) -> Floats:
    found: Floats = np.max(np.abs(errors), axis=-1)
    return found


def _moves(error: Floats, slopes: Floats) -> list[Point]:
    """Integer moves that should make the largest error small: by the slopes, near and far."""
    origin = np.zeros((1, len(slopes)))
    weights = np.ones(len(error))
    tried = origin
    for _ in range(WEIGHTINGS):
        tried = np.concatenate([tried, _nearest(error * weights, slopes * weights)])
        errors = _predicted(error, tried, slopes)
        sizes = _sizes(errors)
        lead = int(np.argmin(sizes))
        weights = weights * (LEAST_WEIGHT + np.abs(errors[lead]) / sizes[lead])
        weights = weights / np.max(weights)
    leader, leader_error, leader_size = tried[lead], errors[lead], sizes[lead]
    for _ in range(PAIR_STEPS):
        near, near_errors = _neighbours(leader, leader_error, slopes)
        near_sizes = _sizes(near_errors)
        tried, sizes = np.concatenate([tried, near]), np.concatenate([sizes, near_sizes])
        lead = int(np.argmin(near_sizes))
        if not near_sizes[lead] < leader_size:
            break
        leader, leader_error, leader_size = near[lead], near_errors[lead], near_sizes[lead]
    near, near_errors = _neighbours(origin[0], error, slopes)
    return [
        *_smallest(tried, sizes, TRIED),
        # where the slopes don't reach that far
        *(_point(np.rint(leader / part)) for part in (2.0, 4.0)),
        *_smallest(near, _sizes(near_errors), TRIED_NEAR),
    ]


def _point(move: Floats) -> Point:
    return tuple(int(step) for step in move)


def _smallest(moves: Floats, sizes: Floats, count: int) -> list[Point]:
    """The distinct moves with the smallest sizes."""
    found: dict[Point, None] = {}
    for index in np.argsort(sizes, kind="stable"):
        found.setdefault(_point(moves[index]))
        if len(found) == count:
            break
    return list(found)


def _predicted(error: Floats, moves: Floats, slopes: Floats) -> Floats:
    """error + moves @ slopes."""
    found: Floats = error + moves[:, 0, None] * slopes[0]
    for i in range(1, len(slopes)):
        found += moves[:, i, None] * slopes[i]
    return found


def _neighbours(move: Floats, error: Floats, slopes: Floats) -> tuple[Floats, Floats]:
    """The moves that differ by 1 in two coordinates or one, or by 2 in one, and their errors."""
    count = len(slopes)
    steps = np.concatenate([np.eye(count), -np.eye(count), np.zeros((1, count))])
    changes = np.concatenate([slopes, -slopes, np.zeros((1, len(error)))])
    first, second = np.triu_indices(len(steps))
    return move + (steps[first] + steps[second]), error + (changes[first] + changes[second])


def _nearest(error: Floats, slopes: Floats) -> Floats:
    """Integer moves that make the sum of squares of error + moves @ slopes small: shape (at most BEAM, coordinates)."""
    order, triangle, target = _triangular(error, slopes)
    moves, costs = np.zeros((1, len(slopes))), np.zeros(1)
    for level in reversed(range(len(slopes))):
        rest = np.full(len(moves), target[level])
        for later in range(level + 1, len(slopes)):
            rest = rest - triangle[level, later] * moves[:, later]
        length = triangle[level, level]
        centre = np.minimum(np.maximum(rest / length, -FARTHEST), FARTHEST) if length else np.zeros(len(moves))
        options = np.rint(centre)[:, None] + OPTIONS
        gaps = rest[:, None] - length * options
        cost = (costs[:, None] + gaps * gaps).ravel()
        kept = np.argsort(cost, kind="stable")[:BEAM]
        moves = moves[kept // len(OPTIONS)]
        moves[:, level] = options.ravel()[kept]
        costs = cost[kept]
    found = np.empty_like(moves)
    found[:, order] = moves
    return found


def _triangular(error: Floats, slopes: Floats) -> tuple[list[int], Floats, Floats]:
    """The triangular form of the normal equations (Cholesky), the order of its columns, and its right-hand side.

    The shortest column comes first: so the finest coordinate is the last to be decided.
    """
    count = len(slopes)
    products = total(slopes[:, None] * slopes)
    right = -total(slopes * error)
    squares = np.diagonal(products).copy()
    left, order = list(range(count)), []
    triangle, target = np.zeros((count, count)), np.zeros(count)
    for level in range(count):
        pick = left.pop(int(np.argmin(products[left, left])))
        order.append(pick)
        if not products[pick, pick] > DEPENDENT * squares[pick]:
            continue
        row = products[pick] / np.sqrt(products[pick, pick])
        triangle[level, [pick, *left]] = row[[pick, *left]]
        target[level] = right[pick] / row[pick]
        products = products - row[:, None] * row
        right = right - row * target[level]
    return order, triangle[:, order], target
