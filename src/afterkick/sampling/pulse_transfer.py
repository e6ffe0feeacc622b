"""A pulse transfer function in factored form, at one working precision.

H(z) = gain * z^-leading * prod(1 - zero/z) / prod(1 - pole/z).
"""

from collections.abc import Hashable, Iterable, Sequence

from attrs import frozen
from flint import acb, acb_poly, arb, ctx, fmpq

from afterkick.model.roots import Root
from afterkick.numbers import COINCIDENCE_BITS, is_exactly_zero, vanishes

__all__ = ["PulseTransfer", "ZRoot", "expanded", "exponential", "real_polynomial_roots"]


@frozen
class ZRoot:
    """A real root, or a conjugate pair named by its member with the positive imaginary part."""

    value: acb
    real: bool
    on_circle: bool = False
    """Exactly on the unit circle, whatever the ball says."""
    name: Hashable = None
    """Equal for the repetitions of one pole."""

    @property
    def degree(self) -> int:
        """1 for a real root, 2 for a pair."""
        return 1 if self.real else 2

    def factor(self) -> tuple[arb, ...]:
        """1 - root/z, or the product over the pair, in powers of 1/z."""
        if self.real:
            return (arb(1), -self.value.real)
        re, im = self.value.real, self.value.imag
        return (arb(1), -2 * re, arb(1) if self.on_circle else re * re + im * im)

    def at_one(self) -> bool:
        """Whether a real root is exactly 1."""
        return self.real and bool(self.value.is_exact()) and bool(self.value.real == 1)


def exponential(root: Root, period: fmpq) -> tuple[ZRoot, ...]:
    """e^(root * T): exactly 1 for a root at the origin, on the circle for one on the imaginary axis.

    A pair at a multiple of half the rate becomes two equal real roots.
    """
    value = root.evaluate()
    image = (value * period).exp()
    on_circle = is_exactly_zero(value.real)
    if root.real or not vanishes(image.imag):
        return (ZRoot(image, root.real, on_circle, root.key),)
    place = acb(1 if image.real > 0 else -1) if on_circle else acb(image.real)
    return (ZRoot(place, True, on_circle, root.key),) * 2


@frozen
class PulseTransfer:
    """Roots are listed as often as they occur; values carry their rigorous radii."""

    gain: arb
    leading: int
    """Zeros at infinity: samples by which an input sample comes late at the earliest."""
    zeros: tuple[ZRoot, ...]
    poles: tuple[ZRoot, ...]

    def at(self, inverse_z: acb) -> acb:
        """H at 1/z = ``inverse_z``."""
        total = acb(self.gain) * inverse_z**self.leading
        for root in self.zeros:
            total *= _factor_at(root, inverse_z)
        for root in self.poles:
            total /= _factor_at(root, inverse_z)
        return total


def _factor_at(root: ZRoot, inverse_z: acb) -> acb:
    if root.real:
        return 1 - root.value * inverse_z
    return (1 - root.value * inverse_z) * (1 - root.value.conjugate() * inverse_z)


def expanded(roots: Iterable[ZRoot]) -> list[arb]:
    """prod(1 - root/z) in powers of 1/z.  For use inside one precision only: never a result."""
    product = [arb(1)]
    for root in roots:
        factor = root.factor()
        longer = [arb(0)] * (len(product) + len(factor) - 1)
        for i, p in enumerate(product):
            for j, f in enumerate(factor):
                longer[i + j] += p * f
        product = longer
    return product


def real_polynomial_roots(coefficients: Sequence[arb]) -> tuple[ZRoot, ...] | None:
    """The roots of a real polynomial with ball coefficients, lowest power first.

    None where this working precision can't isolate them or decide which are real.  At 2048 bits a polynomial that may
    vanish at 1 or -1 does so: only there do double roots come about by themselves.
    """
    degree = len(coefficients) - 1
    if degree == 0:
        return ()
    if coefficients[-1].contains(0):
        return None
    if ctx.prec >= COINCIDENCE_BITS:
        for place in (1, -1):
            if sum((c * place**k for k, c in enumerate(coefficients)), arb(0)).contains(0):
                rest = real_polynomial_roots(_divided(coefficients, arb(place)))
                return None if rest is None else (*rest, ZRoot(acb(place), True))
    if degree == 1:
        return (ZRoot(acb(-coefficients[0] / coefficients[1]), True),)
    if degree == 2:
        return _quadratic_roots(*coefficients)
    try:
        found = acb_poly(list(coefficients)).roots(tol=arb(2) ** (40 - ctx.prec // 2))
    except ValueError:
        return _beside_the_origin(coefficients)
    return _classified(found)


def _beside_the_origin(coefficients: Sequence[arb]) -> tuple[ZRoot, ...] | None:
    """As :func:`real_polynomial_roots` where some roots are below 2^-900, which the root finder can't cope with.

    If |c_m| R^m exceeds the sum of all other |c_k| R^k, m roots are within R of the origin (Rouche's theorem).  As m
    balls of radius R their product encloses the true factor, coefficient by coefficient.
    """
    size = [abs(c).upper() for c in coefficients]
    for m in range(1, len(coefficients) - 1):
        pivot = abs(coefficients[m]).lower()
        if not pivot > 0:
            continue
        # large enough for each of the lower coefficients, with room to spare
        radius = arb(0)
        for k in range(m):
            radius = radius.max((4 * m * size[k] / pivot).root(m - k).upper())
        others = sum((size[k] * radius**k for k in range(len(size)) if k != m), arb(0))
        if radius < arb(2) ** -900 and others < pivot * radius**m:
            tiny = ZRoot(acb(arb(0, radius)), True)
            quotient = list(coefficients)
            for _ in range(m):
                quotient = _divided(quotient, tiny.value.real)
            rest = real_polynomial_roots(quotient)
            return None if rest is None else (*rest, *[tiny] * m)
    return None


def _divided(coefficients: Sequence[arb], place: arb) -> list[arb]:
    """The quotient by (z - place), which divides the polynomial: Horner's rule, highest power first."""
    quotient, total = [], arb(0)
    for coefficient in reversed(coefficients[1:]):
        total = total * place + coefficient
        quotient.append(total)
    return quotient[::-1]


def _quadratic_roots(c0: arb, c1: arb, c2: arb) -> tuple[ZRoot, ...] | None:
    discriminant = c1 * c1 - 4 * c2 * c0
    if discriminant < 0:
        return (ZRoot(acb(-c1, (-discriminant).sqrt()) / (2 * abs(c2)) * (1 if c2 > 0 else -1), False),)
    if not (discriminant > 0 or is_exactly_zero(discriminant)):
        return None
    root = discriminant.sqrt()
    return tuple(ZRoot(acb((-c1 + sign * root) / (2 * c2)), True) for sign in (-1, 1))


def _classified(found: Sequence[acb]) -> tuple[ZRoot, ...] | None:
    """Real roots and pairs among isolated roots of a real polynomial.

    The mirror image of a root is a root.  So a ball that meets the real axis, and whose mirror image meets no other
    ball, holds a real root.
    """
    roots = []
    for index, root in enumerate(found):
        if root.imag > 0:
            roots.append(ZRoot(root, False))
        elif root.imag.contains(0):
            height = abs(root.imag).upper()
            symmetric = acb(root.real, arb(0, height))
            if any(symmetric.overlaps(other) for j, other in enumerate(found) if j != index):
                return None
            roots.append(ZRoot(acb(root.real), True))
    return tuple(roots) if sum(root.degree for root in roots) == len(found) else None
