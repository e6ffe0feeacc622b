"""The filter that the integer coefficients realise, in the same terms as the exact sampled filter.

The output rounding is left out: this is the linear part of what ships, and it is exact, as integers have exact roots.
"""

from collections.abc import Sequence

from attrs import evolve
from flint import fmpq, fmpq_poly

from afterkick.fixed.program import Program
from afterkick.sampling.rational_cascade import rational_cascade
from afterkick.sampling.sampled import Sampled

__all__ = ["realised"]

Section = tuple[Sequence[fmpq | int], Sequence[fmpq | int]]


def realised(program: Program, sampled: Sampled) -> Sampled:
    """``sampled`` with the transfer function of the program's integers, in output units per input unit."""
    gain = program.output_format.full_scale / program.input_format.full_scale
    sections = _sections(program)
    return evolve(sampled, attempt=lambda: rational_cascade(sections, gain), warnings=(), arrangement=None)


def _sections(program: Program) -> list[Section]:
    """(b, a) whose product is the transfer function, in powers of 1/z; for the parallel structure the sum over one
    denominator."""
    weighed: list[Section] = [
        ([b * fmpq(2) ** (section.a_fraction_bits - section.b_fraction_bits) for b in section.b], section.a)
        for section in program.sections
    ]
    if program.structure != "parallel":
        return weighed
    total, bottom = fmpq_poly([0]), fmpq_poly([1])
    for b, a in weighed:
        part, factor = fmpq_poly(list(b)), fmpq_poly(list(a))
        total, bottom = total * factor + part * bottom, bottom * factor
    return [(total.coeffs(), [1]), *(([1], a) for _, a in weighed)]
