"""A transfer function in factored form: gain * prod(s - zero) / prod(s - pole) * e^(-s * dead time)."""

from collections.abc import Callable, Iterable

from attrs import field, frozen
from flint import arb, fmpq, fmpq_poly

from afterkick.model.roots import HERTZ, Roots, algebraic_roots, count, merged

__all__ = ["Factors", "Gain", "constant", "from_polynomials", "product"]


@frozen
class Gain:
    """rational * (2*pi)^pi_power * product of real numbers that are computed at the working precision."""

    rational: fmpq = fmpq(1)
    pi_power: int = 0
    others: tuple[Callable[[], arb], ...] = ()

    def value(self) -> arb:
        """The gain as a ball."""
        total = arb(self.rational) * (2 * arb.pi()) ** self.pi_power
        for other in self.others:
            total *= other()
        return total

    def __mul__(self, other: "Gain") -> "Gain":
        return Gain(self.rational * other.rational, self.pi_power + other.pi_power, self.others + other.others)


@frozen
class Factors:
    """One block of a model, or a product of blocks."""

    zeros: Roots
    poles: Roots
    gain: Gain
    dc_gain: fmpq | None = field(default=None)
    """The gain at s = 0 where it is known as a rational; None otherwise, and for a pole or zero at the origin."""
    dead_time_s: fmpq = fmpq(0)

    @property
    def order(self) -> int:
        """The number of poles."""
        return count(self.poles)


def constant(value: fmpq) -> Factors:
    """A pure gain."""
    return Factors({}, {}, Gain(value), value)


def from_polynomials(numerator: fmpq_poly, denominator: fmpq_poly, unit: str) -> Factors:
    """numerator(x) / denominator(x), x = s in rad/s, or x = s / (2*pi) for polynomials in Hz.

    Neither polynomial may be zero.  Common factors stay: the model cancels, and names them.
    """
    excess = denominator.degree() - numerator.degree()
    leading = numerator.leading_coefficient() / denominator.leading_coefficient()
    dc_gain = numerator[0] / denominator[0] if numerator[0] != 0 and denominator[0] != 0 else None
    return Factors(
        algebraic_roots(numerator, unit),
        algebraic_roots(denominator, unit),
        Gain(leading, excess if unit == HERTZ else 0),
        dc_gain,
    )


def product(parts: Iterable[Factors]) -> Factors:
    """The cascade of the parts; nothing cancels here."""
    listed = list(parts)
    gain = Gain()
    dc_gain: fmpq | None = fmpq(1)
    dead_time_s = fmpq(0)
    for part in listed:
        gain *= part.gain
        dc_gain = None if dc_gain is None or part.dc_gain is None else dc_gain * part.dc_gain
        dead_time_s += part.dead_time_s
    return Factors(
        merged(part.zeros for part in listed), merged(part.poles for part in listed), gain, dc_gain, dead_time_s
    )
