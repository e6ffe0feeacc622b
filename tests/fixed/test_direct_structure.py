"""The direct structure: what is kept exactly, what is refused, how the gain is split."""

import math

import pytest
from attrs import evolve
from flint import fmpq

from afterkick.design.schema import Arithmetic, Integrator, Lowpass, Notch, Signal, Signals
from afterkick.errors import Refused
from afterkick.fixed import direct_program, quantised_dc_gain
from afterkick.fixed.program import Move, Rounding, Sum, Term
from afterkick.fixed.ranges import analyse
from afterkick.fixed.scaling import NORMS, FloatSection, norm_exponents
from afterkick.numbers import working_bits
from fixed.random_designs import PlainSampled, program_of, random_program
from helpers import blocks, pulse, sampled


def refusal(*sections, **options) -> str:
    with pytest.raises(Refused) as caught:
        program_of(*sections, **options)
    return str(caught.value)


def test_integers_are_the_rounded_coefficients():
    program = program_of(([0.2, 0.4, 0.2], [-1.2, 0.5]), coefficient_bits=16)
    (section,) = program.sections
    # 1.2 * 2^14 fits 15 bits and a sign, 1.2 * 2^15 does not; likewise 0.4 * 2^16
    assert (section.a_fraction_bits, section.b_fraction_bits) == (14, 16)
    assert section.a == (16384, -19661, 8192)
    assert section.b == (13107, 26214, 13107)
    errors = {c.name: c.error_last_places for c in section.coefficients}
    assert errors["a1"] == pytest.approx(-19661 + 1.2 * 2**14, abs=1e-9)
    assert errors["a2"] == 0
    assert all(abs(error) <= 0.5 for error in errors.values())


def test_highest_power_is_stored_as_such():
    (section,) = program_of(([1, 0, 0], [-1.5, 0.625]), coefficient_bits=16).sections
    assert section.b == (32768, 0, 0)
    assert section.b_fraction_bits == 15


@pytest.mark.parametrize("seed", range(30))
def test_every_integer_fits_its_word_and_uses_it(seed):
    program = random_program(seed)
    limit = 2 ** (program.coefficient_bits - 1)
    for section in program.sections:
        assert max(map(abs, section.b)) <= limit
        assert max(map(abs, section.a)) <= limit
    assert analyse(program).faults == ()


def test_zero_coefficients_make_no_term():
    program = program_of(([0, 0.5], [0, 0.25]))
    terms = [term.label for step in program.steps if isinstance(step, Sum) for term in step.terms]
    assert sorted(label for label in terms if label) == ["a2", "b1"]


def test_sections_share_the_history_between_them():
    program = program_of(([0.1, 0.2, 0.1], [-1.2, 0.5]), ([0.1, 0.2, 0.1], [-1.2, 0.5]))
    states = [word.name for word in program.words if word.role.value == "state"]
    assert sorted(states) == ["v1_1", "v1_2", "x_1", "x_2", "y_1", "y_2"]
    assert len([step for step in program.steps if isinstance(step, Move)]) == 6


def test_real_sampled_filters_keep_their_exact_poles_and_zeros():
    integrator = sampled(blocks(Integrator(), Lowpass("butterworth", 2, fmpq(100))), 1000, "zero-order-hold")
    program = direct_program(integrator, Arithmetic(), Signals(), "probe")
    assert any(section.marginal and sum(section.a) == 0 for section in program.sections)
    assert quantised_dc_gain(program) is None
    notch = sampled(blocks(Notch(fmpq(50), fmpq(5))), 1000, "bilinear")
    (section,) = direct_program(notch, Arithmetic(), Signals(), "probe").sections
    assert section.b[0] == section.b[2] != 0
    lowpass = sampled(blocks(Lowpass("butterworth", 4, fmpq(100))), 1000, "bilinear")
    for section in direct_program(lowpass, Arithmetic(), Signals(), "probe").sections:
        assert section.b[0] - section.b[1] + section.b[2] == 0


# Thirds and sevenths, so that every coefficient is rounded.
@pytest.mark.parametrize(
    ("b", "a", "check"),
    [
        ((fmpq(3, 7), fmpq(-16, 21), fmpq(1, 3)), (-1.2, 0.5), lambda b, a: sum(b) == 0),
        ((fmpq(3, 7), fmpq(16, 21), fmpq(1, 3)), (-1.2, 0.5), lambda b, a: b[0] - b[1] + b[2] == 0),
        ((fmpq(3, 7), 0, fmpq(-3, 7)), (-1.2, 0.5), lambda b, a: b == (-b[2], 0, b[2])),
        ((0.3, 0.2), (fmpq(-4, 3), fmpq(1, 3)), lambda b, a: sum(a) == 0),
        ((0.3, 0.2), (fmpq(2, 3), fmpq(-1, 3)), lambda b, a: a[0] - a[1] + a[2] == 0),
        ((0.3, 0.2), (fmpq(-4, 3), 1), lambda b, a: a[0] == a[2]),
        ((0.3, 0.2), (-2, 1), lambda b, a: a == (a[0], -2 * a[0], a[0])),
    ],
    ids=["zero at 1", "zero at -1", "zeros at 1 and -1", "pole at 1", "pole at -1", "pole pair", "double pole at 1"],
)
@pytest.mark.parametrize("bits", range(8, 20))
def test_exact_cancellations_survive_rounding(b, a, check, bits):
    (section,) = program_of((b, a), marginal=True, coefficient_bits=bits).sections
    assert check(section.b, section.a)
    assert max(abs(c.error_last_places) for c in section.coefficients) <= 1


def test_integers_do_not_depend_on_the_working_precision():
    filtered = sampled(blocks(Lowpass("chebyshev", 5, fmpq(40), ripple_db=fmpq(1, 2))), 1000, "zero-order-hold")
    found = []
    for bits in (128, 1024):
        with working_bits(bits):
            found.append(direct_program(filtered, Arithmetic(coefficient_bits=24), Signals(), "probe"))
    assert found[0] == found[1]


def test_full_scales_are_in_the_gain():
    signals = Signals(Signal("V", fmpq(10)), Signal("A", fmpq(1, 4)))
    program = program_of(([fmpq(1, 100)], [fmpq(-1, 2)]), signals=signals, coefficient_bits=24)
    (section,) = program.sections
    gain = quantised_dc_gain(program)
    assert abs(gain * 50 - 1) < fmpq(1, 2**20)
    stored = fmpq(sum(section.b), sum(section.a)) * fmpq(2) ** (section.a_fraction_bits - section.b_fraction_bits)
    assert stored == gain * 40


def test_scaling_cancels_exactly():
    sections = (([0.01, 0.02, 0.01], [-1.7, 0.75]), ([30, 10], [-0.5]), ([0.1, 0.1], [-0.9]))
    for scaling in ("peak-gain", "two-norm", "infinity"):
        program = program_of(*sections, scaling=scaling)
        assert sum(section.gain_log2 for section in program.sections) == 0
        assert any(section.gain_log2 for section in program.sections)
    assert not any(section.gain_log2 for section in program_of(*sections, scaling="none").sections)


def test_peak_gain_scaling_keeps_the_first_section_from_clipping():
    """The word of v1 holds what the worst input makes of it, and is used to half at least."""
    sections = ([1, 2, 1], [-1.7, 0.75]), ([0.1], [])
    first = program_of(*sections).sections[0]
    response = pulse(PlainSampled(sections[:1]).sections(128), 400)
    peak_gain = sum(abs(float(value)) for value in response)
    assert 0.5 < peak_gain * 2.0**first.gain_log2 <= 1.001


def test_wide_sums_take_64_bits_and_narrow_ones_32():
    widths = {
        step.dest: step.accumulator_bits
        for step in program_of(([0.2, 0.4, 0.2], [-1.2, 0.5]), data_bits=8, coefficient_bits=8).steps
        if isinstance(step, Sum)
    }
    assert set(widths.values()) == {32}
    wide = program_of(([0.2, 0.4, 0.2], [-1.2, 0.5]), data_bits=32, coefficient_bits=32)
    assert {step.accumulator_bits for step in wide.steps if isinstance(step, Sum)} == {64}
    assert analyse(wide).faults == ()


def test_a_given_accumulator_costs_fraction_bits():
    free = program_of(([0.3, 0.4, 0.3], [-1.9, 0.95]), data_bits=16).sections[0]
    tight = program_of(([0.3, 0.4, 0.3], [-1.9, 0.95]), data_bits=16, accumulator_bits=32).sections[0]
    assert tight.b_fraction_bits + tight.a_fraction_bits < free.b_fraction_bits + free.a_fraction_bits


def test_pole_pushed_onto_the_circle_is_refused():
    text = refusal(([0.1], [-1.9999, 0.99991]), coefficient_bits=8)
    assert "section 1" in text
    order = [text.index(word) for word in ("wider coefficients", '"delta" or "coupled"', "lower sampling rate")]
    assert order == sorted(order)


def test_pole_near_one_without_significant_bits_is_refused():
    assert "1 + a1 + a2 keeps 3 significant bits" in refusal(([0.1], [-1 + 7 / 2**15]), coefficient_bits=16)
    program_of(([0.1], [-1 + 8 / 2**15]), coefficient_bits=16)


def test_pole_on_the_circle_is_refused_where_the_exact_filter_has_none():
    assert "on or outside the unit circle" in refusal(([0.1], [-1 + 2**-20]), coefficient_bits=16)
    program_of(([0.1], [-1]), marginal=True, coefficient_bits=16)


def test_unstable_pole_stays_outside_or_is_refused():
    assert program_of(([0.1], [-1.25])).sections[0].a == (16384, -20480, 0)
    assert "no pole is outside" in refusal(([0.1], [-1 - 2**-20]))
    assert "1 + a1 + a2 keeps 2 significant bits" in refusal(([0.1], [-1 - 3 * 2**-14]))


def test_every_section_reports_its_problem():
    text = refusal(([0.1], [-1 + 2**-20]), ([0.1], [-0.5]), ([0.1], [-1 + 2**-20]))
    assert "section 1" in text
    assert "section 2" not in text
    assert "section 3" in text


def test_lost_numerators_are_refused():
    assert "gain is zero" in refusal(([0, 0], [-0.5]))
    assert "significant bits" in refusal(([1e-300], [-0.5]))
    assert "last places" in refusal(([fmpq(1, 10**12)], [-0.5]), data_bits=8, coefficient_bits=8)


@pytest.mark.parametrize("gain", [10**9, 10**30, 10**300], ids=str)
def test_gains_beyond_every_accumulator_are_refused(gain):
    assert "does not fit the accumulator" in refusal(([gain], [-0.5]), accumulator_bits=32)


def test_too_long_a_delay_is_refused():
    assert "257 whole samples" in refusal(([0.1], [-0.5]), delay=257)


@pytest.mark.parametrize(
    "options",
    [
        {"kind": "float32"},
        {"state_bits": 40},
        {"clamp": (fmpq(-1), fmpq(1))},
    ],
    ids=lambda options: next(iter(options)),
)
def test_what_the_structure_does_not_know_is_named(options):
    text = refusal(([0.1], [-0.5]), **options)
    assert f"arithmetic.{next(iter(options))}" in text
    assert "remedy" in text


def test_faulty_programs_are_found():
    program = program_of(([0.1, 0.2, 0.1], [-1.2, 0.5]))
    (section,) = program.sections
    first = section.steps[0]

    def faults(*steps):
        return " ".join(analyse(evolve(program, sections=(evolve(section, steps=steps),))).faults)

    assert "unknown word z" in faults(evolve(first, terms=(Term(1, "z"),)))
    assert "before it is written" in faults(*section.steps[1:])
    assert "written twice" in faults(first, *section.steps)
    assert "never written" in faults(first)
    assert "is written" in faults(*section.steps, Move("x", "y"))
    assert "a partial sum" in faults(evolve(first, terms=(Term(2**16, "x"),), accumulator_bits=32))
    # 2^15 * (2^15 - 1) + 2^15 * 2^15 and the rounding offset stay below 2^31
    difference = (Term(2**15, "x"), Term(-(2**15), "x_1"))
    assert "a partial sum" not in faults(evolve(first, terms=difference, accumulator_bits=32))
    assert "a partial sum" in faults(evolve(first, terms=(*difference, Term(1, "x_2")), accumulator_bits=32))
    # the rounding offset alone makes this one too wide, by one
    halved = evolve(first, terms=difference, accumulator_bits=32, right_shift=16)
    assert "a partial sum of t1 can reach 2147483648" in faults(halved)
    assert "a partial sum" not in faults(evolve(halved, rounding=Rounding.FLOOR))
    assert "negative shift" in faults(evolve(first, terms=(Term(1, "x", -1),)))
    assert "shifted right" in faults(evolve(first, right_shift=63))
    assert "no terms" in faults(evolve(first, terms=()))


# Closed forms: peak gain of 1/(1 - 2 r cos(pi/N)/z + r^2/z^2), r = 0.95, and noise gain (1+r^2)/(1-r^2)/(1+r^4-2 r^2
# cos(2 theta)) (Oppenheim and Schafer, round-off noise of a second-order section), squared two-norm.
PEAK_GAINS = {2: 10.256410256410254, 3: 13.672217353198938, 4: 17.49925743726912, 6: 25.480426379755084}


@pytest.mark.parametrize(("divisor", "expected"), PEAK_GAINS.items(), ids=str)
def test_norm_estimates_of_a_resonator(divisor, expected):
    r, angle = 0.95, math.pi / divisor
    section = FloatSection((1, 0, 0), (-2 * r * math.cos(angle), r * r), 0)
    noise_gain = (1 + r**2) / (1 - r**2) / (1 + r**4 - 2 * r**2 * math.cos(2 * angle))
    assert NORMS["peak-gain"]([section]) == pytest.approx([expected], rel=1e-9)
    assert NORMS["two-norm"]([section]) == pytest.approx([math.sqrt(noise_gain)], rel=1e-9)
    # the peak of the magnitude is reached at cos w = (1+r^2)/(2r) cos angle, close to the pole's own angle
    assert NORMS["infinity"]([section])[0] == pytest.approx(1 / ((1 - r**2) * math.sin(angle)), rel=1e-3)


@pytest.mark.parametrize("slack", [1e-2, 1e-4, 1e-6])
def test_norm_estimates_of_slow_poles(slack):
    """One pole at 1 - slack and gain 1 at DC: peak gain 1, two-norm sqrt(slack/(2 - slack)), peak of magnitude 1."""
    section = FloatSection((slack, 0, 0), (slack - 1, 0), 0)
    assert NORMS["peak-gain"]([section, section]) == pytest.approx([1, 1], rel=1e-2)
    assert NORMS["two-norm"]([section])[0] == pytest.approx(math.sqrt(slack / (2 - slack)), rel=1e-2)
    assert NORMS["infinity"]([section]) == pytest.approx([1], rel=1e-9)
    assert norm_exponents([section, section], "peak-gain") == [0, 0]


def test_program_at_high_oversampling():
    """Four sections at 10,000 samples per corner period keep their gain, the search included."""
    filtered = sampled(blocks(Lowpass("butterworth", 8, fmpq(1))), 10_000, "zero-order-hold")
    program = direct_program(filtered, Arithmetic(data_bits=32, coefficient_bits=32), Signals(), "probe")
    assert len(program.sections) == 4
    assert quantised_dc_gain(program) == 1
