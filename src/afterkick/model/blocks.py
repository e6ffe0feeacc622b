"""Every block type of a design file as exact factors in s.

Coefficients that are rational in rad/s or in Hz keep their exact roots; only a notch of an arbitrary depth and a
controller that mixes both units need balls.
"""

from typing import assert_never

from flint import arb, fmpq, fmpq_poly

from afterkick.design import schema
from afterkick.model.factors import Factors, Gain, constant, from_polynomials
from afterkick.model.families import Prototype, attenuation, bandpass, bandstop, highpass, lowpass, prototype
from afterkick.model.roots import HERTZ, RADIANS, ZERO, Root, algebraic_roots, quadratic_roots

__all__ = ["block_factors"]


def block_factors(block: schema.Block) -> Factors:
    """The transfer function of one block, whose values the reader has checked.

    :raises Refused: where the values contradict one another.
    """
    match block:
        case schema.Gain():
            return constant(block.gain)
        case schema.Integrator():
            return Factors({}, {ZERO: 1}, Gain(block.gain))
        case schema.Lag():
            return _lag(block)
        case schema.LeadLag():
            return _scaled(block.gain, _hertz([1, 1 / block.zero_hz], [1, 1 / block.pole_hz]))
        case schema.Lowpass():
            return lowpass(_prototype(block), block.corner_hz)
        case schema.Highpass():
            return highpass(_prototype(block), block.corner_hz)
        case schema.Bandpass():
            return bandpass(_prototype(block), block.low_hz, block.high_hz)
        case schema.Bandstop():
            return bandstop(_prototype(block), block.low_hz, block.high_hz)
        case schema.SecondOrder():
            square = block.corner_hz**2
            return _hertz([square], [square, block.corner_hz / block.quality, 1])
        case schema.Notch():
            return _notch(block)
        case schema.Resonator():
            width = block.bandwidth_hz
            return _scaled(block.gain, _hertz([0, width], [block.center_hz**2, width, 1]))
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
