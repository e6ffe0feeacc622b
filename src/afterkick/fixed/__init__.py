"""Fixed point: a sampled filter becomes a straight-line integer program, and the program can be run bit for bit."""

from afterkick.fixed.direct import direct_program
from afterkick.fixed.program import Program, quantised_dc_gain
from afterkick.fixed.simulate import Trace, simulate, trace

__all__ = ["Program", "Trace", "direct_program", "quantised_dc_gain", "simulate", "trace"]
