"""The filter that the integer coefficients realise, in the same terms as the exact sampled filter.

The output rounding is left out: this is the linear part of what ships, and it is exact, as integers have exact roots.
"""

from collections import Counter
from collections.abc import Hashable, Sequence

from attrs import evolve
from flint import acb, arb, fmpq, fmpq_poly

from afterkick.fixed.program import Program
from afterkick.model.roots import RADIANS, algebraic_roots
from afterkick.sampling.pulse_transfer import PulseTransfer, ZRoot
from afterkick.sampling.sampled import Sampled

__all__ = ["realised"]


def realised(program: Program, sampled: Sampled) -> Sampled:
    """``sampled`` with the transfer function of the program's integers, in output units per input unit."""
    gain = program.output_format.full_scale / program.input_format.full_scale
    numerators = [_trimmed(numerator) for numerator in _numerators(program)]
    denominators = [_trimmed(section.a)[1] for section in program.sections]
    leading = sum(late for late, _ in numerators)
    for _, b in numerators:
        gain *= b[0]
    for a in denominators:
        gain /= a[0]
    surplus = leading + sum(len(b) - 1 for _, b in numerators) - sum(len(a) - 1 for a in denominators)

    def transfer() -> PulseTransfer:
        poles = [root for a in denominators for root in _roots(a)]
        poles += [ZRoot(acb(0), True, name=0)] * max(0, surplus)
        zeros = [root for _, b in numerators for root in _roots(b)]
        shared = Counter(pole.name for pole in poles) & Counter(zero.name for zero in zeros)
        return PulseTransfer(arb(gain), leading, _without(zeros, shared), _without(poles, shared))

    return evolve(sampled, attempt=transfer, warnings=())


def _numerators(program: Program) -> list[Sequence[fmpq]]:
    """Factors of the numerator over the product of all sections' a, in powers of 1/z."""
    weighed = [
        [b * fmpq(2) ** (section.a_fraction_bits - section.b_fraction_bits) for b in section.b]
        for section in program.sections
    ]
    if program.structure != "parallel":
        return [*weighed]
    total = fmpq_poly([0])
    for section, b in zip(program.sections, weighed, strict=True):
        part = fmpq_poly(b)
        for other in program.sections:
            if other is not section:
                part *= fmpq_poly(list(other.a))
        total += part
    return [total.coeffs()]


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


def _trimmed(coefficients: Sequence[fmpq | int]) -> tuple[int, list[fmpq | int]]:
    """How many leading coefficients are zero, and the rest without trailing zeros."""
    present = [index for index, value in enumerate(coefficients) if value]
    return present[0], list(coefficients[present[0] : present[-1] + 1])


def _roots(coefficients: Sequence[fmpq | int]) -> list[ZRoot]:
    """The roots in z of a polynomial in 1/z, as often as they occur."""
    polynomial = fmpq_poly(list(reversed(coefficients)))
    on_circle = len(coefficients) == 3 and coefficients[0] == coefficients[2]
    return [
        ZRoot(root.evaluate(), root.real, on_circle and not root.real, root.key)
        for root, times in algebraic_roots(polynomial, RADIANS).items()
        for _ in range(times)
    ]
