"""The continuous model: exact poles, zeros, gain, dead time and initial conditions."""

from functools import cached_property

from attrs import field, frozen
from flint import acb, arb, fmpq, fmpq_poly

from afterkick.errors import Problem, Refused
from afterkick.model.factors import Factors, Gain
from afterkick.model.partial_fractions import Mode, expand, polynomial_taylor, product_taylor
from afterkick.model.roots import (
    RADIANS,
    ZERO,
    Root,
    Roots,
    algebraic_roots,
    cancel,
    count,
    merged,
    refuse_undecided,
    values,
)
from afterkick.numbers import decided_sign, is_exactly_zero

__all__ = ["MAXIMUM_ORDER", "FreeResponse", "Model", "build", "real_part_sign"]

MAXIMUM_ORDER = 16


def real_part_sign(root: Root) -> int:
    """-1 left of the imaginary axis, 0 exactly on it, 1 right of it."""
    if is_exactly_zero(root.evaluate().real):
        return 0
    return decided_sign(lambda: root.evaluate().real, "the real part of a root")


@frozen
class FreeResponse:
    """What the initial conditions alone do: numerator(s) / prod(s - pole), all exact."""

    numerator: fmpq_poly
    poles: Roots

    def modes(self) -> tuple[Mode, ...]:
        """The modes at the present working precision."""
        poles = [(root.evaluate(), root.real, times) for root, times in self.poles.items()]
        return expand(polynomial_taylor(self.numerator), poles)


@frozen
class Model:
    """H(s) = gain * prod(s - zero) / prod(s - pole) * e^(-s * dead time), nothing left to cancel.

    Real numbers are evaluated at the present working precision; s is in rad/s.
    """

    zeros: Roots
    poles: Roots
    gain: Gain
    dc_gain: fmpq | None
    """H(0) where it is known as a rational; None otherwise, and where a pole or zero is at the origin."""
    dead_time_s: fmpq
    before: tuple[fmpq, ...] = ()
    """y, y', ... at t = 0-."""
    free: FreeResponse | None = None
    cancelled: tuple[tuple[Root, int], ...] = field(default=())
    """Exactly cancelled pole-zero pairs: root and times."""
    warnings: tuple[str, ...] = ()

    @cached_property
    def order(self) -> int:
        """The number of poles."""
        return count(self.poles)

    @cached_property
    def relative_degree(self) -> int:
        """Poles less zeros; negative for an improper model."""
        return self.order - count(self.zeros)

    @cached_property
    def poles_at_origin(self) -> int:
        """The number of integrators."""
        return self.poles.get(ZERO, 0)

    @cached_property
    def zeros_at_origin(self) -> int:
        """The number of zeros at s = 0."""
        return self.zeros.get(ZERO, 0)

    @cached_property
    def signs(self) -> dict[Root, int]:
        """The sign of each pole's real part."""
        return {root: real_part_sign(root) for root in self.poles}

    @property
    def stability(self) -> str:
        """``stable``, ``marginal`` (simple poles on the imaginary axis) or ``unstable``."""
        if any(sign > 0 or (sign == 0 and self.poles[root] > 1) for root, sign in self.signs.items()):
            return "unstable"
        return "marginal" if any(sign == 0 for sign in self.signs.values()) else "stable"

    def feedthrough(self) -> arb:
        """The Dirac weight of the impulse response; the point zero for a strictly proper model."""
        return self.gain.value() if self.relative_degree == 0 else arb(0)

    def dc_gain_ball(self) -> arb | None:
        """H(0); None with an integrator."""
        if self.poles_at_origin:
            return None
        if self.zeros_at_origin:
            return arb(0)
        if self.dc_gain is not None:
            return arb(self.dc_gain)
        return self.origin_coefficient()

    def origin_coefficient(self) -> arb:
        """c of H(s) ~ c s^k for s -> 0, k = zeros less poles at the origin."""
        total = acb(self.gain.value())
        for value, times in values({root: n for root, n in self.zeros.items() if not root.at_origin}):
            total *= (-value) ** times
        for value, times in values({root: n for root, n in self.poles.items() if not root.at_origin}):
            total /= (-value) ** times
        return total.real

    def response_modes(self, integrations: int = 0) -> tuple[Mode, ...]:
        """The modes of H(s) / s^integrations without dead time: impulse (0), step (1) or ramp (2) response.

        The Dirac part of the impulse response is not among them.
        """
        zeros = dict(self.zeros)
        free = min(integrations, zeros.get(ZERO, 0))
        if free:
            zeros[ZERO] -= free
        poles = merged([self.poles, {ZERO: integrations - free} if integrations > free else {}])
        return expand(
            product_taylor(self.gain.value(), values({root: n for root, n in zeros.items() if n})),
            [(root.evaluate(), root.real, times) for root, times in poles.items()],
        )

    def markov_parameters(self, last: int) -> list[arb]:
        """m0 .. m_last of H(s) = m0 + m1/s + m2/s^2 + ...; those below the relative degree are the point zero.

        The proper case only.  An impulse of unit area makes the i-th derivative of the output jump by m(i+1).
        """
        terms = last + 1 - self.relative_degree
        if terms <= 0:
            return [arb(0)] * (last + 1)
        series = [acb(self.gain.value())] + [acb(0)] * (terms - 1)
        for zero, times in values(self.zeros):
            for _ in range(times):
                series = [series[0]] + [series[j] - zero * series[j - 1] for j in range(1, terms)]
        for pole, times in values(self.poles):
            for _ in range(times):
                for j in range(1, terms):
                    series[j] += pole * series[j - 1]
        return [arb(0)] * self.relative_degree + [value.real for value in series]

    def at(self, s: acb) -> acb:
        """H(s), dead time included."""
        total = acb(self.gain.value())
        for zero, times in values(self.zeros):
            total *= (s - zero) ** times
        for pole, times in values(self.poles):
            total /= (s - pole) ** times
        return total * (-s * self.dead_time_s).exp() if self.dead_time_s != 0 else total


def _cancellation_problems(common: Roots, where: str) -> list[Problem]:
    return [
        Problem(
            where,
            f"an unstable pole at {root.text()} that a zero cancels exactly",
            "cancellation of stable pairs only: the hidden mode grows on the real plant",
            "remove the pair from the model, or correct the pole or the zero",
        )
        for root in common
        if real_part_sign(root) > 0
    ]


def build(
    factors: Factors, before: tuple[fmpq, ...] = (), denominator: fmpq_poly | None = None, where: str = "model"
) -> Model:
    """The model of a factored transfer function: common roots cancelled and named, the order checked.

    ``before`` (y, y', ... at 0-) needs the ``denominator`` a_n s^n + ... + a_0 of the differential equation.

    :raises Refused: an order outside 1..16, an unstable or initial-condition-excited cancellation, roots that can't be
        told apart.
    """
    refuse_undecided({**factors.zeros, **factors.poles})
    zeros, poles, common = cancel(factors.zeros, factors.poles)
    problems = _cancellation_problems(common, where)
    order = count(poles)
    if not 1 <= order <= MAXIMUM_ORDER:
        problems.append(
            Problem(
                where,
                f"order {order}" + (" after cancellation" if common else ""),
                f"order 1 to {MAXIMUM_ORDER}",
                "a pure gain or delay needs no filter" if order == 0 else "split the model into two designs",
            )
        )
    free = None
    if any(value != 0 for value in before) and denominator is not None:
        free = _free_response(denominator, before)
        for root in common:
            if free.poles.get(root, 0) > poles.get(root, 0):
                problems.append(
                    Problem(
                        f"{where}.before",
                        f"initial values that excite the cancelled pole at {root.text()}",
                        "initial values under which the cancelled mode rests",
                        "remove the common factor from the equation, or start from rest",
                    )
                )
    if problems:
        raise Refused(problems)
    warnings = tuple(
        f"a pole on the imaginary axis at {root.text()} is cancelled exactly; on the real plant its mode drifts unseen"
        for root in common
        if real_part_sign(root) == 0
    )
    dc_gain = factors.dc_gain
    if dc_gain is not None and (ZERO in zeros or ZERO in poles):
        dc_gain = None
    return Model(
        zeros, poles, factors.gain, dc_gain, factors.dead_time_s, before, free, tuple(common.items()), warnings
    )


def _free_response(denominator: fmpq_poly, before: tuple[fmpq, ...]) -> FreeResponse:
    """Y(s) = sum_k a_k sum_(j<k) s^(k-1-j) y^(j)(0-) / A(s), in lowest terms (Laplace transform of derivatives)."""
    coefficients = [fmpq(0)] * denominator.degree()
    for k, a in enumerate(denominator.coeffs()):
        for j in range(min(k, len(before))):
            coefficients[k - 1 - j] += a * before[j]
    monic = denominator / denominator.leading_coefficient()
    numerator = fmpq_poly(coefficients) / denominator.leading_coefficient()
    shared = numerator.gcd(monic)
    return FreeResponse(numerator // shared, algebraic_roots(monic // shared, RADIANS))
