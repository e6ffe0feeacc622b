"""Every block type of a design file as exact factors in s.

Coefficients that are all rational in rad/s, or all in Hz, give exactly keyed roots; only a notch of arbitrary depth and
a controller that mixes both units need balls.
"""

from collections.abc import Sequence
from typing import assert_never

from flint import acb, arb, fmpq, fmpq_poly

from afterkick.design import schema
from afterkick.model.factors import Factors, Gain, constant, from_polynomials
from afterkick.model.families import Prototype, attenuation, bandpass, bandstop, highpass, lowpass, prototype
from afterkick.model.roots import HERTZ, RADIANS, ZERO, Root, algebraic_roots, merged, quadratic_roots

__all__ = ["block_factors"]


def block_factors(block: schema.Block) -> Factors:
    """The transfer function of one block, whose values the reader has checked; an ideal controller is improper."""
    match block:
        case schema.Gain():
            return constant(block.gain)
        case schema.Integrator():
            return Factors({}, {ZERO: 1}, Gain(block.gain))
        case schema.Lag():
            return _lag(block)
        case schema.LeadLag():
            return _hertz([block.gain, block.gain / block.zero_hz], [1, 1 / block.pole_hz])
        case schema.Lowpass():
            return lowpass(_prototype(block), block.corner_hz)
        case schema.Highpass():
            return highpass(_prototype(block), block.corner_hz)
        case schema.Bandpass():
            return bandpass(_prototype(block), block.low_hz, block.high_hz)
        case schema.Bandstop():
            return bandstop(_prototype(block), block.low_hz, block.high_hz)
        case schema.SecondOrder():
            return _hertz([block.corner_hz**2], _resonance(block.corner_hz, block.corner_hz / block.quality))
        case schema.Notch():
            return _notch(block)
        case schema.Resonator():
            width = block.bandwidth_hz
            return _hertz([0, block.gain * width], _resonance(block.center_hz, width))
        case schema.Pid():
            return _pid(block)
        case schema.Ratio():
            return _radians(block.numerator[::-1], block.denominator[::-1])
        case schema.RcLowpass():
            return _radians([1], [1, block.ohm * block.farad])
        case schema.RcHighpass():
            return _radians([0, block.ohm * block.farad], [1, block.ohm * block.farad])
        case schema.DeadTime():
            return Factors({}, {}, Gain(), fmpq(1), block.delay_s)
    assert_never(block)


def _radians(numerator: Sequence[fmpq | int], denominator: Sequence[fmpq | int]) -> Factors:
    """A ratio of polynomials in s, lowest power first."""
    return from_polynomials(fmpq_poly(list(numerator)), fmpq_poly(list(denominator)), RADIANS)


def _hertz(numerator: Sequence[fmpq | int], denominator: Sequence[fmpq | int]) -> Factors:
    """A ratio of polynomials in s / (2 pi), lowest power first."""
    return from_polynomials(fmpq_poly(list(numerator)), fmpq_poly(list(denominator)), HERTZ)


def _resonance(center_hz: fmpq, width_hz: fmpq) -> list[fmpq | int]:
    """x^2 + width x + center^2, lowest power first."""
    return [center_hz**2, width_hz, 1]


def _prototype(block: schema.Lowpass | schema.Highpass | schema.Bandpass | schema.Bandstop) -> Prototype:
    return prototype(block.family, block.order, block.ripple_db, block.stop_db)


def _lag(block: schema.Lag) -> Factors:
    if block.corner_hz is not None:
        return _hertz([block.corner_hz], [block.corner_hz, 1])
    assert block.time_constant_s is not None  # the reader takes exactly one of the two
    return _radians([1], [1, block.time_constant_s])


def _notch(block: schema.Notch) -> Factors:
    """(x^2 + d w x + f^2) / (x^2 + w x + f^2), w = f / quality; d is the gain at the centre."""
    center, width = block.center_hz, block.center_hz / block.quality
    level = Gain(fmpq(0)) if block.depth_db is None else attenuation(block.depth_db)
    if block.depth_db is None or not level.others:
        return _hertz(_resonance(center, level.rational * width), _resonance(center, width))

    def numerator() -> tuple[arb, arb, arb]:
        radians = 2 * arb.pi()
        return arb(1), level.value() * arb(width) * radians, (arb(center) * radians) ** 2

    # The same product d w can be written with 20 dB more and a tenth of the quality.
    decades = fmpq((block.depth_db / 20).floor())
    key = ("notch", center, block.depth_db - 20 * decades, width / fmpq(10) ** int(decades.numerator))
    poles = algebraic_roots(fmpq_poly(_resonance(center, width)), HERTZ)
    return Factors(quadratic_roots(numerator, key), poles, Gain(), fmpq(1))


def _pid(block: schema.Pid) -> Factors:
    """kp + ki / s + kd s / (1 + s / w): parallel form, without the lag w where no derivative corner is given."""
    kp, ki, kd, corner = block.kp, block.ki, block.kd, block.derivative_corner_hz
    if corner is None or kd == 0:
        return _radians([ki, kp, kd], [0, 1]) if ki != 0 else _radians([kp, kd], [1])
    lag = algebraic_roots(fmpq_poly([corner, 1]), HERTZ)
    if kp == 0 and ki == 0:
        return Factors({ZERO: 1}, lag, Gain(kd * corner, 1))

    def numerator() -> tuple[arb, arb, arb]:
        w = 2 * arb.pi() * arb(corner)
        return arb(kp) + arb(kd) * w, arb(kp) * w + arb(ki), arb(ki) * w

    # pi is transcendental: the leading coefficient is not zero, and the discriminant only where kp and ki both are.
    gain = Gain(others=(lambda: numerator()[0],))
    key = ("pid", kp / kd, ki / kd, corner)
    if ki == 0:
        zero = Root(key, True, lambda: acb(-numerator()[1] / numerator()[0]))
        return Factors({zero: 1}, lag, gain, kp)
    return Factors(quadratic_roots(numerator, key), merged([{ZERO: 1}, lag]), gain)
