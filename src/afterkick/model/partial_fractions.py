"""Partial fractions of a factored rational function, and the time functions they stand for.

With exact multiplicities there is no special case for poles at the origin or repeated poles; close poles only cost
working precision, which the caller raises until the result is accurate enough.
"""

from collections.abc import Callable, Sequence

from attrs import frozen
from flint import acb, arb, fmpq, fmpq_poly

__all__ = ["Mode", "evaluate", "expand", "modes_known", "polynomial_taylor", "product_taylor"]


@frozen
class Mode:
    """The terms of one pole: sum over j of coefficients[j] / (s - pole)^(j+1)."""

    pole: acb
    """Imaginary part >= 0; a complex pole stands for its conjugate too, whose coefficients are conjugates."""
    real: bool
    coefficients: tuple[acb, ...]


def modes_known(modes: Sequence[Mode], bits: int = 100) -> bool:
    """Whether every pole is exact or known to ``bits`` bits, and every coefficient relative to the largest one."""
    largest = arb(0)
    for mode in modes:
        for coefficient in mode.coefficients:
            largest = largest.max(abs(coefficient).lower())
    limit = largest * arb(2) ** -bits
    return all(
        (mode.pole.is_exact() or int(mode.pole.rel_accuracy_bits()) >= bits)
        and all(bool(c.rad() <= limit) for c in mode.coefficients)
        for mode in modes
    )


def _times_linear(series: list[acb], constant: acb) -> list[acb]:
    """series * (constant + e), truncated."""
    return [series[0] * constant] + [series[j] * constant + series[j - 1] for j in range(1, len(series))]


def _over_linear(series: list[acb], constant: acb) -> list[acb]:
    """series / (constant + e), truncated."""
    quotient: list[acb] = []
    for j, value in enumerate(series):
        quotient.append((value - quotient[j - 1] if j else value) / constant)
    return quotient


def product_taylor(gain: arb, zeros: Sequence[tuple[acb, int]]) -> Callable[[acb, int], list[acb]]:
    """Taylor coefficients of gain * prod(s - zero) about any point."""

    def taylor(point: acb, terms: int) -> list[acb]:
        series = [acb(gain)] + [acb(0)] * (terms - 1)
        for zero, times in zeros:
            for _ in range(times):
                series = _times_linear(series, point - zero)
        return series

    return taylor


def polynomial_taylor(polynomial: fmpq_poly) -> Callable[[acb, int], list[acb]]:
    """Taylor coefficients of a rational polynomial about any point."""

    def taylor(point: acb, terms: int) -> list[acb]:
        series, derivative, factorial = [], polynomial, 1
        for j in range(terms):
            factorial *= max(j, 1)
            total = acb(0)
            for coefficient in reversed(derivative.coeffs()):
                total = total * point + arb(coefficient)
            series.append(total / factorial)
            derivative = derivative.derivative()
        return series

    return taylor


def expand(numerator: Callable[[acb, int], list[acb]], poles: Sequence[tuple[acb, bool, int]]) -> tuple[Mode, ...]:
    """The modes of numerator(s) / prod(s - pole)^times; a polynomial part, if any, is left out.

    ``numerator(point, terms)`` gives that many Taylor coefficients about a point; ``poles`` lists (value with imaginary
    part >= 0, real, times).
    """
    every = [(pole, times, (index, False)) for index, (pole, _, times) in enumerate(poles)]
    every += [(p.conjugate(), times, (index, True)) for index, (p, real, times) in enumerate(poles) if not real]
    modes = []
    for index, (pole, real, times) in enumerate(poles):
        series = numerator(pole, times)
        for other, other_times, name in every:
            if name != (index, False):
                for _ in range(other_times):
                    series = _over_linear(series, pole - other)
        if real:
            series = [acb(value.real) for value in series]
        modes.append(Mode(pole, real, tuple(reversed(series))))
    return tuple(modes)


def evaluate(modes: Sequence[Mode], time: fmpq) -> arb:
    """sum over modes of sum over j of coefficients[j] t^j / j! e^(pole t), real, at t = ``time`` >= 0."""
    total = arb(0)
    for mode in modes:
        power = acb(1)
        inner = acb(0)
        for j, coefficient in enumerate(mode.coefficients):
            if j:
                power = power * time / j
            inner += coefficient * power
        value = (inner * (mode.pole * time).exp()).real
        total += value if mode.real else 2 * value
    return total
