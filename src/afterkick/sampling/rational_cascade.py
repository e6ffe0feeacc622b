"""A cascade with rational coefficients as a pulse transfer function: exact, as rationals have exact roots."""

from collections import Counter
from collections.abc import Hashable, Sequence

from flint import acb, arb, fmpq, fmpq_poly

from afterkick.model.roots import RADIANS, algebraic_roots
from afterkick.sampling.pulse_transfer import PulseTransfer, ZRoot

__all__ = ["rational_cascade"]

Rationals = Sequence[fmpq | int]


def rational_cascade(sections: Sequence[tuple[Rationals, Rationals]], gain: fmpq) -> PulseTransfer:
    """gain * prod(b(1/z) / a(1/z)) over (b, a), at the present working precision; a[0] must not be zero."""
    numerators = [_trimmed(b) for b, _ in sections]
    denominators = [_trimmed(a)[1] for _, a in sections]
    for _, b in numerators:
        gain *= b[0]
    for a in denominators:
        gain /= a[0]
    leading = sum(late for late, _ in numerators)
    surplus = leading + sum(len(b) - 1 for _, b in numerators) - sum(len(a) - 1 for a in denominators)
    poles = [root for a in denominators for root in _roots(a)]
    poles += [ZRoot(acb(0), True, name=0)] * max(0, surplus)
    zeros = [root for _, b in numerators for root in _roots(b)]
    shared = Counter(pole.name for pole in poles) & Counter(zero.name for zero in zeros)
    return PulseTransfer(arb(gain), leading, _without(zeros, shared), _without(poles, shared))


def _without(roots: Sequence[ZRoot], shared: Counter[Hashable]) -> tuple[ZRoot, ...]:
    """What remains of zeros or poles once those that rounding made equal have cancelled; names decide equality."""
    left = shared.copy()
    kept = []
    for root in roots:
        if left[root.name]:
            left[root.name] -= 1
        else:
            kept.append(root)
    return tuple(kept)


def _trimmed(coefficients: Rationals) -> tuple[int, list[fmpq | int]]:
    """How many leading coefficients are zero, and the rest without trailing zeros."""
    present = [index for index, value in enumerate(coefficients) if value]
    return present[0], list(coefficients[present[0] : present[-1] + 1])


def _roots(coefficients: Rationals) -> list[ZRoot]:
    """The roots in z of a polynomial in 1/z, as often as they occur."""
    polynomial = fmpq_poly(list(reversed(coefficients)))
    on_circle = len(coefficients) == 3 and coefficients[0] == coefficients[2]
    return [
        ZRoot(root.evaluate(), root.real, on_circle and not root.real, root.key)
        for root, times in algebraic_roots(polynomial, RADIANS).items()
        for _ in range(times)
    ]
