"""Poles and zeros as exact numbers.

A :class:`Root` can be evaluated at any working precision, and two roots are equal exactly when their keys are: an
algebraic root is keyed by its irreducible polynomial over the rationals and its place among that polynomial's roots, a
root of a filter family by the family's parameters.  So multiplicities and cancellations are decided, not guessed.

The unit of a polynomial is rad/s or Hz.  2*pi is transcendental, so non-zero algebraic roots given in different units
are never equal.
"""

from collections.abc import Callable, Hashable, Iterable, Mapping
from functools import lru_cache
from itertools import combinations

from attrs import field, frozen
from flint import acb, acb_poly, arb, ctx, fmpq, fmpq_poly, fmpz_poly

from afterkick.errors import Problem, Refused, Uncertified
from afterkick.numbers import LOWEST_BITS, decided_sign, mid_float, working_bits

__all__ = [
    "HERTZ",
    "RADIANS",
    "ZERO",
    "Root",
    "Roots",
    "algebraic_roots",
    "cancel",
    "count",
    "merged",
    "quadratic_roots",
    "refuse_undecided",
    "values",
]

RADIANS = "rad/s"
HERTZ = "Hz"


def _scale(unit: str) -> arb:
    return 2 * arb.pi() if unit == HERTZ else arb(1)


@frozen
class Root:
    """A real root, or a conjugate pair named by its member with the positive imaginary part."""

    key: tuple[Hashable, ...]
    real: bool = field(eq=False)
    evaluate: Callable[[], acb] = field(eq=False, repr=False)
    """The root in rad/s at the present working precision."""

    @property
    def degree(self) -> int:
        """1 for a real root, 2 for a conjugate pair."""
        return 1 if self.real else 2

    @property
    def at_origin(self) -> bool:
        """Whether the root is exactly zero."""
        return self.key == ZERO.key

    @property
    def algebraic(self) -> bool:
        """Whether the key decides equality with every other algebraic root."""
        return self.key[0] in ("origin", "algebraic")

    def text(self) -> str:
        """The root as a reader would write it, six digits."""
        value = self.evaluate()
        re, im = mid_float(value.real), mid_float(value.imag)
        return f"{re:.6g} rad/s" if self.real else f"{re:.6g} ± {abs(im):.6g}j rad/s"


ZERO = Root(("origin",), True, lambda: acb(0))

Roots = Mapping[Root, int]
"""Roots with their multiplicities; a conjugate pair is counted once."""


def count(roots: Roots) -> int:
    """The degree of the polynomial with these roots."""
    return sum(root.degree * times for root, times in roots.items())


def values(roots: Roots) -> list[tuple[acb, int]]:
    """Every root with its multiplicity, conjugates written out."""
    found = []
    for root, times in roots.items():
        value = root.evaluate()
        found.append((value, times))
        if not root.real:
            found.append((value.conjugate(), times))
    return found


def merged(parts: Iterable[Roots]) -> dict[Root, int]:
    """All roots of a product; equal roots add their multiplicities."""
    total: dict[Root, int] = {}
    for part in parts:
        for root, times in part.items():
            total[root] = total.get(root, 0) + times
    return total


def cancel(zeros: Roots, poles: Roots) -> tuple[dict[Root, int], dict[Root, int], dict[Root, int]]:
    """Zeros and poles without what they share, and what they shared."""
    common = {root: min(times, poles[root]) for root, times in zeros.items() if root in poles}

    def less(roots: Roots) -> dict[Root, int]:
        rest = {root: times - common.get(root, 0) for root, times in roots.items()}
        return {root: times for root, times in rest.items() if times}

    return less(zeros), less(poles), common


def refuse_undecided(roots: Iterable[Root]) -> None:
    """Make sure that roots with different keys are different numbers.

    :raises Refused: naming a pair that 1024 bits can't tell apart.
    """
    listed = list(roots)
    suspects = [
        (one, other)
        for one, other in combinations(listed, 2)
        if not (one.algebraic and other.algebraic) and one.evaluate().overlaps(other.evaluate())
    ]
    for one, other in suspects:
        with working_bits(1024):
            if not one.evaluate().overlaps(other.evaluate()):
                continue
            raise Refused(
                Problem(
                    "model",
                    f"two roots near {one.text()} that can't be told apart, of different descriptions",
                    "roots that are equal by their parameters, or distinct",
                    "describe both with the same block type and parameters, or move one",
                )
            )


@lru_cache(maxsize=512)
def _isolated(coefficients: tuple[int, ...], bits: int) -> tuple[acb, ...]:
    """Disjoint balls round the roots (imaginary part >= 0) of an irreducible polynomial, lowest power first."""
    if len(coefficients) == 3:
        c0, c1, c2 = coefficients
        discriminant = c1 * c1 - 4 * c2 * c0
        root = arb(abs(discriminant)).sqrt()
        if discriminant < 0:
            return (acb(arb(fmpq(-c1, 2 * c2)), root / abs(2 * c2)),)
        return tuple(acb((-c1 + sign * root) / (2 * c2)) for sign in (-1, 1))
    if not any(coefficients[1::2]):
        return tuple(root for square in _every_root(coefficients[::2], bits) for root in _square_roots(square))
    return tuple(root for root in _every_root(coefficients, bits) if root.imag.is_zero() or root.imag > 0)


def _every_root(coefficients: tuple[int, ...], bits: int) -> list[acb]:
    if len(coefficients) == 3:
        upper = _isolated(coefficients, bits)
        return [*upper, upper[0].conjugate()] if len(upper) == 1 else list(upper)
    pairs: list[tuple[acb, int]] = fmpz_poly(list(coefficients)).complex_roots()  # type: ignore[assignment]  # stub is wrong
    return [root for root, _ in pairs]


def _square_roots(square: acb) -> list[acb]:
    """The square roots with imaginary part >= 0.  Of an even irreducible polynomial these are its roots: purely
    imaginary ones come out with a real part that is exactly zero, which no general root finder can promise."""
    if square.imag.is_zero():
        size = abs(square.real).sqrt()
        return [acb(0, size)] if square.real < 0 else [acb(-size), acb(size)]
    root = square.sqrt()
    return [root if square.imag > 0 else -root]


def _algebraic(coefficients: tuple[int, ...], index: int, first: acb, unit: str) -> Root:
    def evaluate() -> acb:
        near = [root for root in _isolated(coefficients, ctx.prec) if root.overlaps(first)]
        if len(near) != 1:
            raise Uncertified("a root of an irreducible polynomial could not be isolated")
        return near[0] * _scale(unit)

    return Root(("algebraic", unit, coefficients, index), bool(first.imag.is_zero()), evaluate)


def _rational(value: fmpq, unit: str) -> Root:
    key = ("algebraic", unit, (-int(value.numerator), int(value.denominator)), 0)
    return Root(key, True, lambda: acb(arb(value) * _scale(unit)))


def algebraic_roots(polynomial: fmpq_poly, unit: str) -> dict[Root, int]:
    """The roots of a rational polynomial with their exact multiplicities.

    Square-free and irreducible factorisation over the rationals (FLINT); ``polynomial`` must not be zero.
    """
    roots: dict[Root, int] = {}
    for factor, times in polynomial.factor()[1]:
        coefficients = tuple(int(c) for c in factor.numer().coeffs())
        if coefficients == (0, 1):
            roots[ZERO] = int(times)
        elif len(coefficients) == 2:
            roots[_rational(fmpq(-coefficients[0], coefficients[1]), unit)] = int(times)
        else:
            for index, first in enumerate(_first_isolation(coefficients)):
                roots[_algebraic(coefficients, index, first, unit)] = int(times)
    return roots


def _first_isolation(coefficients: tuple[int, ...]) -> tuple[acb, ...]:
    """The balls that name each root: at 128 bits whatever the caller's precision, so that an index never changes."""
    _refuse_near_coincidence(coefficients)
    with working_bits(LOWEST_BITS):
        return _isolated(coefficients, LOWEST_BITS)


def _refuse_near_coincidence(coefficients: tuple[int, ...]) -> None:
    """Isolating roots that agree in thousands of bits would keep the machine busy for minutes.

    :raises Refused: such a polynomial.
    """
    if len(coefficients) <= 3:
        return
    try:
        acb_poly([acb(value) for value in coefficients]).roots(maxprec=4096)
    except ValueError:
        raise Refused(
            Problem(
                "model",
                f"a polynomial factor of order {len(coefficients) - 1} with roots that 4096 bits can't tell apart",
                "roots that are equal exactly, or distinct",
                'give the model as factors: kind = "blocks" or "roots"',
            )
        ) from None


def quadratic_roots(coefficients: Callable[[], tuple[arb, arb, arb]], key: tuple[Hashable, ...]) -> dict[Root, int]:
    """The two roots of c2 s^2 + c1 s + c0 (rad/s) with ball coefficients, highest power first.

    ``key`` names the polynomial.  Whether the roots are real is decided at rising precision.
    """

    def discriminant() -> arb:
        c2, c1, c0 = coefficients()
        return c1 * c1 - 4 * c2 * c0

    def member(sign: int) -> acb:
        c2, c1, c0 = coefficients()
        root = abs(c1 * c1 - 4 * c2 * c0).sqrt()
        if kind < 0:
            return acb(-c1 / (2 * c2), root / (2 * abs(c2)))
        return acb((-c1 + sign * root) / (2 * c2))

    kind = decided_sign(discriminant, "the discriminant of a quadratic factor")
    if kind < 0:
        return {Root(("quadratic", *key), False, lambda: member(1)): 1}
    if kind == 0:
        return {Root(("quadratic", *key), True, lambda: member(0)): 2}
    return {
        Root(("quadratic", *key, -1), True, lambda: member(-1)): 1,
        Root(("quadratic", *key, 1), True, lambda: member(1)): 1,
    }
