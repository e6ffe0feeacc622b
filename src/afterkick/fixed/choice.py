"""What the choice of integers gained, and what it kept: judged from the finished integers, not from the search."""

from collections.abc import Sequence

from attrs import evolve, frozen
from flint import arb, fmpq

from afterkick.fixed.kept import exact_dc_gain, gain_at_one, numerator_symmetry
from afterkick.fixed.program import Program, ProgramSection, quantised_dc_gain
from afterkick.fixed.pulse_grid import Grid, Integers, transient_samples
from afterkick.fixed.quantise import PROBE_BITS, ExactSection, exact_sections
from afterkick.fixed.realised import realised
from afterkick.numbers import certified, mid_float, working_bits
from afterkick.sampling.sampled import Sampled

__all__ = ["ChoiceReport", "Kept", "choice_report"]

DENSE, EACH = 1024, 128


@frozen
class Kept:
    """Something that the exact filter has, and whether the integers have it exactly."""

    section: int | None
    """Its number; None for the whole filter."""
    name: str
    holds: bool


@frozen
class ChoiceReport:
    """The integers of a program beside the nearest ones at the same binary points.

    An impulse error is max |h_q - h_d| / max |h_d|: the response of the integers, before any rounding of signals,
    against the exact sampled one.  It is computed in balls, good to all its digits, over the samples compared.
    """

    nearest_error: float
    """Of the nearest integers, that keep the zeros and poles but not the DC gain."""
    chosen_error: float
    samples: int
    """How many samples were compared: all of the first, then every second, fifth, eleventh, ..."""
    last_sample: int
    properties: tuple[Kept, ...]
    dc_gain_error: float | None
    """Of the chosen integers, relative to the exact sampled filter; None with a pole or zero at z = 1."""

    @property
    def factor(self) -> float | None:
        """By which the choice lowers the impulse error; None where nothing is left of it."""
        return self.nearest_error / self.chosen_error if self.chosen_error else None

    @property
    def gave_way(self) -> tuple[Kept, ...]:
        """What the exact filter has and the integers have not."""
        return tuple(one for one in self.properties if not one.holds)


def choice_report(program: Program, sampled: Sampled) -> ChoiceReport:
    """Of a program whose sections are those of the sampled filter, in their order."""
    sections = _with_gains(program, exact_sections(sampled))
    nearest = tuple(
        evolve(one, b=section.numerator(one.b_fraction_bits), a=section.denominator(one.a_fraction_bits))
        for one, section in zip(program.sections, sections, strict=True)
    )
    integers = [Integers(one.b, one.b_fraction_bits, one.a, one.a_fraction_bits) for one in program.sections]
    indices = Grid.over(transient_samples(integers), DENSE, EACH).indices
    candidates = [realised(one, sampled) for one in (evolve(program, sections=nearest), program)]
    nearest_error, chosen_error = _errors(sampled, candidates, indices)
    rational = exact_dc_gain(sampled)
    gain = quantised_dc_gain(program)
    kept = rational is not None and gain == rational
    properties = [each for one, section in zip(program.sections, sections, strict=True) for each in _kept(one, section)]
    if rational is not None:
        properties.append(Kept(None, "DC gain", kept))
    of_codes = program.input_format.full_scale / program.output_format.full_scale
    error = 0.0 if kept else _dc_gain_error(None if gain is None else gain * of_codes, sections)
    return ChoiceReport(nearest_error, chosen_error, len(indices), indices[-1], tuple(properties), error)


def _with_gains(program: Program, sections: Sequence[ExactSection]) -> list[ExactSection]:
    gains = [fmpq(2) ** section.gain_log2 for section in program.sections]
    gains[-1] *= program.input_format.full_scale / program.output_format.full_scale
    return [evolve(section, gain=gain) for section, gain in zip(sections, gains, strict=True)]


def _errors(exact: Sampled, others: Sequence[Sampled], indices: Sequence[int]) -> list[float]:
    """The largest distance of each from the exact pulse response, relative to that one's largest sample."""

    def compute() -> list[list[arb]]:
        wanted = exact.pulse(indices)
        return [wanted, *([a - b for a, b in zip(other.pulse(indices), wanted, strict=True)] for other in others)]

    def precise(found: list[list[arb]]) -> bool:
        # an error of exactly zero has no leading digit, so it is measured by the response
        floor = _largest(found[0]).lower() * arb(2) ** -100
        limits = [_largest(values).lower() * arb(2) ** -40 + floor for values in found]
        return all(bool(value.rad() <= limit) for values, limit in zip(found, limits, strict=True) for value in values)

    with working_bits(PROBE_BITS):
        found = certified(compute, precise, "the difference of two pulse responses")
        peak, *distances = (_largest(values) for values in found)
        return [mid_float(distance / peak) for distance in distances]


def _largest(values: Sequence[arb]) -> arb:
    largest = arb(0)
    for value in values:
        largest = largest.max(abs(value))
    return largest


def _kept(one: ProgramSection, section: ExactSection) -> list[Kept]:
    (b0, b1, b2), (a0, a1, a2) = one.b, one.a
    symmetry = numerator_symmetry(section)
    found = [
        ("pole at z = 1", section.pole_at_one, a0 + a1 + a2 == 0),
        ("pole at z = -1", section.pole_at_minus_one, a0 - a1 + a2 == 0),
        ("pole pair on the unit circle", section.pole_pair_on_circle, a2 == a0),
        ("zero at z = 1", section.zero_at_one, b0 + b1 + b2 == 0),
        ("zero at z = -1", section.zero_at_minus_one, b0 - b1 + b2 == 0),
        ("b0 = b2", symmetry == 1, b0 == b2),
        ("b0 = -b2", symmetry == -1, b0 == -b2),
    ]
    return [Kept(section.number, name, holds) for name, exact, holds in found if exact]


def _dc_gain_error(gain: fmpq | None, sections: Sequence[ExactSection]) -> float | None:
    """Of a gain of codes; the sections are exact to far more digits than a double shows."""
    if gain is None or any(section.zero_at_one or section.pole_at_one for section in sections):
        return None
    with working_bits(PROBE_BITS):
        total = arb(gain)
        for section in sections:
            total /= gain_at_one(section)
        return mid_float(total - 1)
