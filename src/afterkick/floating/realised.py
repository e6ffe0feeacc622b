"""The filter that the stored singles realise, in the same terms as the exact sampled filter; roundings are left out."""

from attrs import evolve
from flint import fmpq

from afterkick.floating.program import FloatProgram
from afterkick.sampling.rational_cascade import rational_cascade
from afterkick.sampling.sampled import Sampled

__all__ = ["realised_float"]


def realised_float(program: FloatProgram, sampled: Sampled) -> Sampled:
    """``sampled`` with the transfer function of the program's coefficients, in output units per input unit."""
    sections = [(section.exact_b, section.exact_a) for section in program.sections]
    return evolve(sampled, attempt=lambda: rational_cascade(sections, fmpq(1)), warnings=(), arrangement=None)
