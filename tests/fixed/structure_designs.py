"""Filters for tests of the structures: models with every kind of pole and zero, and what they are compared with."""

from fractions import Fraction

from flint import fmpq, fmpq_poly

from afterkick.design.schema import (
    Arithmetic,
    Bandpass,
    Bandstop,
    Gain,
    Highpass,
    Integrator,
    Lag,
    LeadLag,
    Lowpass,
    Notch,
    Pid,
    Resonator,
    Signal,
    Signals,
)
from afterkick.fixed.coupled import coupled_program
from afterkick.fixed.delta import delta_program
from afterkick.fixed.direct import direct_program
from afterkick.fixed.linear import LinearSystem, RationalResponse
from afterkick.fixed.parallel import parallel_program
from afterkick.fixed.program import Program
from afterkick.fixed.realised import realised
from afterkick.fixed.transposed import transposed_program
from afterkick.numbers import working_bits
from afterkick.sampling import Sampled
from helpers import blocks, sampled

BUILD = {
    "direct": direct_program,
    "transposed": transposed_program,
    "delta": delta_program,
    "coupled": coupled_program,
    "parallel": parallel_program,
}
NEW = ("transposed", "delta", "coupled", "parallel")
WIDE = ("delta", "coupled", "parallel")

# All corners at 1 Hz, so that the rate is the number of samples a corner period.
MODELS = {
    "low-pass 1": blocks(Lowpass("butterworth", 1, fmpq(1))),
    "low-pass 2": blocks(Lowpass("butterworth", 2, fmpq(1))),
    "low-pass 5": blocks(Lowpass("chebyshev", 5, fmpq(1), ripple_db=fmpq(1, 2))),
    "low-pass 8": blocks(Lowpass("butterworth", 8, fmpq(1))),
    "low-pass 16": blocks(Lowpass("butterworth", 16, fmpq(1))),
    "elliptic 6": blocks(Lowpass("elliptic", 6, fmpq(1), ripple_db=fmpq(1, 2), stop_db=fmpq(60))),
    "high-pass 1": blocks(Highpass("butterworth", 1, fmpq(1))),
    "high-pass 2": blocks(Highpass("butterworth", 2, fmpq(1))),
    "band-pass 8": blocks(Bandpass("butterworth", 4, fmpq(1, 2), fmpq(2))),
    "band-stop 4": blocks(Bandstop("butterworth", 2, fmpq(1, 2), fmpq(2))),
    "notch": blocks(Notch(fmpq(1), fmpq(5))),
    "resonator": blocks(Resonator(fmpq(1), fmpq(1, 20))),
    "lead-lag": blocks(LeadLag(fmpq(1), fmpq(3))),
    "gain 10/3": blocks(Lowpass("butterworth", 2, fmpq(1)), Gain(fmpq(10, 3))),
    "two lags": blocks(Lag(corner_hz=fmpq(1)), Lag(corner_hz=fmpq(3))),
    "equal lags": blocks(Lag(corner_hz=fmpq(1)), Lag(corner_hz=fmpq(1))),
    "three equal lags": blocks(*[Lag(corner_hz=fmpq(1))] * 3),
    "integrator": blocks(Integrator()),
    "integrator, lag": blocks(Integrator(), Lag(corner_hz=fmpq(1))),
    "pi": blocks(Pid(fmpq(2), fmpq(3))),
}
STABLE = tuple(name for name in MODELS if not name.startswith(("integrator", "pi")))
# A pole repeated more than once has no sum of parts: see test_refusals_name_section_and_remedy.
CASES = tuple(
    (structure, model)
    for structure in NEW
    for model in MODELS
    if (structure, model) != ("parallel", "three equal lags")
)
STABLE_CASES = tuple((structure, model) for structure, model in CASES if model in STABLE)

HALF = Signals(Signal("V", fmpq(1), fmpq(1, 2)), Signal("V", fmpq(1)))
"""Half of full scale is promised, so that an overshoot has room."""
ROOMY = Signals(Signal("V", fmpq(1)), Signal("V", fmpq(8)))


def build(structure: str, filtered: Sampled, signals: Signals = ROOMY, **arithmetic: object) -> Program:
    return BUILD[structure](filtered, Arithmetic(structure=structure, **arithmetic), signals, "probe")


def at(model: str, rate: int, method: str = "zero-order-hold") -> Sampled:
    return sampled(MODELS[model], rate, method)


def impulse_error(program: Program, filtered: Sampled, samples: int) -> float:
    """Peak of the difference of realised and exact impulse response, relative to the peak of the exact one."""
    with working_bits(2048):
        ours = realised(program, filtered).first_samples(samples)
        exact = filtered.first_samples(samples)
        peak = max(abs(float(value.mid())) for value in exact)
        return max(abs(float((one - other).mid())) for one, other in zip(ours, exact, strict=True)) / peak


def transfer_of_sections(program: Program) -> RationalResponse:
    """The transfer function of the sections' b and a, without any delay in front, in output codes per input code."""
    parts = []
    for section in program.sections:
        power = fmpq(2) ** (section.a_fraction_bits - section.b_fraction_bits)
        parts.append((fmpq_poly([value * power for value in section.b]), fmpq_poly(list(section.a))))
    top, bottom = parts[0]
    for numerator, denominator in parts[1:]:
        if program.structure == "parallel":
            top, bottom = top * denominator + numerator * bottom, bottom * denominator
        else:
            top, bottom = top * numerator, bottom * denominator
    shared = top.gcd(bottom)
    top, bottom = top // shared, bottom // shared
    return RationalResponse(top / bottom[0], bottom / bottom[0])


def response_of_steps(program: Program) -> RationalResponse:
    """The transfer function of the steps themselves."""
    return LinearSystem(program).responses(None)[program.output]


def dc_gain(program: Program) -> Fraction | None:
    """In output units per input unit."""
    total = transfer_of_sections(program).total
    if total is None:
        return None
    total *= program.output_format.full_scale / program.input_format.full_scale
    return Fraction(int(total.numerator), int(total.denominator))
