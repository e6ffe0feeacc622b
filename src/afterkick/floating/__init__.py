"""Sampled -> FloatProgram: the filter in single precision, its simulator and what it costs in accuracy."""

from afterkick.floating.build import float_program
from afterkick.floating.estimates import FloatEstimates, float_estimates
from afterkick.floating.program import FloatProgram, float_dc_gain
from afterkick.floating.realised import realised_float
from afterkick.floating.simulate import float_trace, simulate_float

__all__ = [
    "FloatEstimates",
    "FloatProgram",
    "float_dc_gain",
    "float_estimates",
    "float_program",
    "float_trace",
    "realised_float",
    "simulate_float",
]
