"""The methods that map s to z: bilinear, matched and backward difference.

Each factor (s - root) becomes a factor of the pulse transfer function, so multiplicities survive and no polynomial is
ever expanded.
"""

from collections.abc import Callable

from attrs import evolve
from flint import acb, arb, fmpq

from afterkick.model.model import Model
from afterkick.model.roots import Root, Roots
from afterkick.numbers import is_exactly_zero, vanishes
from afterkick.sampling.pulse_transfer import PulseTransfer, ZRoot, exponential

__all__ = ["backward_difference_transfer", "bilinear_constant", "bilinear_transfer", "matched_transfer"]


Mapped = tuple[arb, tuple[ZRoot, ...]]
"""(s - root), or the product over its conjugate pair, as scale * prod(1 - z_root/z); without roots: scale / z."""


def bilinear_constant(period: fmpq, match_hz: fmpq | None) -> arb:
    """K of s = K (1 - 1/z) / (1 + 1/z): 2/T, or w / tan(w T / 2) for a matched frequency."""
    if match_hz is None:
        return arb(2 / period)
    half_angle = match_hz * period
    return 2 * arb.pi() * match_hz * arb.cos_pi_fmpq(half_angle) / arb.sin_pi_fmpq(half_angle)


def bilinear_transfer(model: Model, period: fmpq, match_hz: fmpq | None) -> PulseTransfer:
    """(s - r) = (K - r)(1 - z_r/z) / (1 + 1/z), z_r = (K + r)/(K - r)."""
    k = bilinear_constant(period, match_hz)

    def mapped(root: Root) -> Mapped:
        value = root.evaluate()
        if root.real and vanishes(k - value):
            return (-2 * k, ())
        on_axis = is_exactly_zero(value.real)
        image = acb(1) if root.at_origin else (k + value) / (k - value)
        return (_norm(k - value, root), (ZRoot(image, root.real, on_axis, root.key),))

    return _assembled(model, mapped, ZRoot(acb(-1), True, name=-1))


def backward_difference_transfer(model: Model, period: fmpq) -> PulseTransfer:
    """(s - r) = (1 - rT)(1 - z_r/z) / T, z_r = 1/(1 - rT)."""

    def mapped(root: Root) -> Mapped:
        lead = 1 - root.evaluate() * period
        if root.real and vanishes(lead):
            return (-1 / arb(period), ())
        # 1/lead is exact for a root at the origin
        return (_norm(lead, root) / arb(period) ** root.degree, (ZRoot(1 / lead, root.real, name=root.key),))

    transfer = _assembled(model, mapped, None)
    poles_at_zero = (ZRoot(acb(0), True, name=0),) * max(0, -model.relative_degree)
    return evolve(transfer, leading=transfer.leading - model.relative_degree, poles=transfer.poles + poles_at_zero)


def matched_transfer(model: Model, period: fmpq, match_hz: fmpq | None, zeros_at_infinity: str) -> PulseTransfer:
    """z_r = e^(rT); zeros at infinity to z = -1 ("half-rate") or left there ("delay").

    The gain is matched at s = 0, where factors at the origin follow the limit s = (1 - 1/z)/T; with ``match_hz`` the
    magnitude is matched there and the sign is that of the rule at s = 0.
    """

    def mapped(root: Root) -> Mapped:
        value = root.evaluate()
        lead = 1 / acb(period) if root.at_origin else value / (value * period).expm1()
        return (_norm(lead, root), exponential(root, period))

    half_rate = zeros_at_infinity == "half-rate"
    transfer = _assembled(model, mapped, ZRoot(acb(-1), True, name=-1) if half_rate else None)
    if half_rate:
        transfer = evolve(transfer, gain=transfer.gain / arb(2) ** model.relative_degree)
    if match_hz is None:
        return transfer
    w = 2 * arb.pi() * match_hz
    wanted = abs(model.at(acb(0, w)))
    inverse_z = (acb(0, -w) * period).exp()
    return evolve(transfer, gain=transfer.gain * wanted / abs(transfer.at(inverse_z)))


def _norm(value: acb, root: Root) -> arb:
    """The real factor of a real root, or of a conjugate pair."""
    return value.real if root.real else value.real * value.real + value.imag * value.imag


def _assembled(model: Model, mapped: Callable[[Root], Mapped], at_infinity: ZRoot | None) -> PulseTransfer:
    """The product of all mapped factors; ``at_infinity`` is where a zero at s = infinity goes (None: to 1/z = 0)."""
    gain = model.gain.value()
    late = 0

    def collect(roots: Roots, power: int) -> tuple[ZRoot, ...]:
        nonlocal gain, late
        found: list[ZRoot] = []
        for root, times in roots.items():
            scale, images = mapped(root)
            gain *= scale ** (power * times)
            found += images * times
            if not images:
                late += power * times
        return tuple(found)

    zeros = collect(model.zeros, 1)
    poles = collect(model.poles, -1)
    excess = model.relative_degree
    if at_infinity is None:
        return PulseTransfer(gain, excess + late, zeros, poles)
    extra = (at_infinity,) * abs(excess)
    return PulseTransfer(gain, late, zeros + (extra if excess > 0 else ()), poles + (extra if excess < 0 else ()))
