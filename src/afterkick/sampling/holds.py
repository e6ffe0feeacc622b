"""The invariance methods: the pulse response is what the continuous model does to a held, ramped or impulsive input.

With s(t) the step and r(t) the ramp response (partial fractions of H/s and H/s^2, so integrators and repeated poles
need no special case), T the period and d the dead time that is left of whole samples:

- zero-order hold      g[n] = s(nT - d) - s((n-1)T - d)
- first-order hold     g[n] = (r((n+1)T - d) - 2 r(nT - d) + r((n-1)T - d)) / T
- impulse-invariant    g[n] = T h(nT - d), with T h(0+)/2 at the jump (L. B. Jackson, "A correction to impulse
  invariance", IEEE Signal Processing Letters 7(10), 2000), plus the Dirac weight at n = 0
"""

from collections.abc import Callable

from flint import acb, arb, fmpq

from afterkick.errors import Problem, Refused
from afterkick.model.model import Model
from afterkick.model.partial_fractions import evaluate
from afterkick.numbers import vanishes
from afterkick.sampling.pulse_transfer import PulseTransfer, ZRoot, expanded, exponential, real_polynomial_roots

__all__ = ["INVARIANT_METHODS", "invariant_transfer", "pulse_response"]

INVARIANT_METHODS = ("zero-order-hold", "first-order-hold", "impulse-invariant")


def pulse_response(
    model: Model, method: str, period: fmpq, fraction_s: fmpq, first_sample: str
) -> Callable[[int], arb]:
    """g[n] for any n >= 0, from the analytic responses, at the present working precision."""
    integrations = {"zero-order-hold": 1, "first-order-hold": 2, "impulse-invariant": 0}[method]
    modes = model.response_modes(integrations)

    def response(time: fmpq) -> arb:
        return evaluate(modes, time) if time >= 0 else arb(0)

    def held(n: int) -> arb:
        return response(n * period - fraction_s) - response((n - 1) * period - fraction_s)

    def ramped(n: int) -> arb:
        past, now, ahead = (response((n + k) * period - fraction_s) for k in (-1, 0, 1))
        return (ahead - 2 * now + past) / period

    def kicked(n: int) -> arb:
        time = n * period - fraction_s
        value = period * response(time)
        if time != 0:
            return value
        return (value / 2 if first_sample == "half" else value) + model.feedthrough()

    return {"zero-order-hold": held, "first-order-hold": ramped, "impulse-invariant": kicked}[method]


def invariant_transfer(
    model: Model, method: str, period: fmpq, fraction_s: fmpq, first_sample: str
) -> PulseTransfer | None:
    """The pulse transfer function: poles e^(pT), numerator from the first samples of g; None: more bits needed.

    A dead time that is not a whole number of samples adds a pole at z = 0 to the holds.

    :raises Refused: a rate at which all samples are zero.
    """
    pulse = pulse_response(model, method, period, fraction_s, first_sample)
    poles = tuple(z for root, times in model.poles.items() for z in exponential(root, period) * times)
    leading, last = _extent(model, method, fraction_s != 0, first_sample)
    denominator = expanded(poles)
    samples = [pulse(n) for n in range(last + 1)]
    numerator = [
        sum((denominator[j] * samples[n - j] for j in range(min(n, model.order) + 1)), arb(0))
        for n in range(leading, last + 1)
    ]
    at_one = min(model.zeros_at_origin, {"zero-order-hold": 1, "first-order-hold": 2}.get(method, 0))
    for _ in range(at_one):
        numerator = _without_one(numerator)
    while numerator and vanishes(numerator[-1]):
        numerator.pop()
    while numerator and (first_is_zero := vanishes(numerator[0])):
        numerator.pop(0)
        leading += 1
    if not numerator:
        raise Refused(
            Problem(
                "sampling.rate_hz",
                f"{method} at a rate where every sample of the response is zero",
                "a rate at which the model's modes are seen",
                "a rate well above twice the fastest mode",
            )
        )
    if first_is_zero is None or vanishes(numerator[-1]) is None:
        return None
    zeros = real_polynomial_roots(list(reversed(numerator)))
    if zeros is None:
        return None
    if fraction_s != 0 and method != "impulse-invariant":
        poles += (ZRoot(acb(0), True, name=0),)
    return PulseTransfer(numerator[0], leading, (ZRoot(acb(1), True),) * at_one + zeros, poles)


def _extent(model: Model, method: str, fractional: bool, first_sample: str) -> tuple[int, int]:
    """The first and last power of 1/z in the numerator; the rest is exactly zero."""
    last = model.order + (1 if fractional and method != "impulse-invariant" else 0)
    if method == "first-order-hold":
        return 0, last
    if method == "zero-order-hold":
        return 0 if model.relative_degree == 0 and not fractional else 1, last
    if fractional:
        return 1, last
    if model.relative_degree == 0:
        return 0, last
    if model.relative_degree == 1:
        return 0, last if first_sample == "half" else last - 1
    return 1, last - 1


def _without_one(coefficients: list[arb]) -> list[arb]:
    """The quotient by (1 - 1/z) of a polynomial in 1/z that has this factor exactly."""
    quotient = []
    total = arb(0)
    for coefficient in coefficients[:-1]:
        total += coefficient
        quotient.append(total)
    return quotient
