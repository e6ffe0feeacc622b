"""What the integers keep exactly, judged in exact rationals from the program alone, and named where it gives way."""

import random
from fractions import Fraction

import pytest
from flint import fmpq, fmpq_poly

from afterkick.design.schema import (
    Arithmetic,
    Block,
    Gain,
    Highpass,
    Integrator,
    Lowpass,
    Notch,
    Signal,
    Signals,
)
from afterkick.errors import Refused
from afterkick.fixed import Program, direct_program
from afterkick.fixed.choice import Kept, choice_report
from afterkick.fixed.kept import exact_dc_gain, lattice
from afterkick.fixed.quantise import exact_sections
from afterkick.model.roots import HERTZ
from afterkick.numbers import fraction
from afterkick.sampling import Sampled
from fixed.random_designs import PlainSampled, random_program
from helpers import blocks, exact, ratio, reference, sampled

DC_KEEPING = ("bilinear", "zero-order-hold", "first-order-hold", "backward-difference", "matched")
VOLTS = Signals(Signal("V", fmpq(10)), Signal("V", fmpq(4)))


def numerator(program: Program) -> fmpq_poly:
    """The product over the sections, in 1/z, without its powers of two."""
    product = fmpq_poly([1])
    for section in program.sections:
        product *= fmpq_poly(list(section.b))
    return product


def denominator(program: Program) -> fmpq_poly:
    product = fmpq_poly([1])
    for section in program.sections:
        product *= fmpq_poly(list(section.a))
    return product


def divides(factor: list[int], times: int, product: fmpq_poly) -> bool:
    return product % fmpq_poly(factor) ** times == 0


def dc_gain(program: Program, signals: Signals) -> Fraction:
    """In output units per input unit, from the integers alone."""
    total = fraction(signals.output.full_scale) / fraction(signals.input.full_scale)
    for section in program.sections:
        total *= Fraction(sum(section.b), sum(section.a)) * Fraction(2) ** (
            section.a_fraction_bits - section.b_fraction_bits
        )
    return total


def built(model_blocks: tuple[Block, ...], rate_hz: object, method: str, bits: int = 16) -> tuple[Program, Sampled]:
    filtered = sampled(blocks(*model_blocks), rate_hz, method)
    return direct_program(filtered, Arithmetic(coefficient_bits=bits), VOLTS, "probe"), filtered


def low_pass(seed: int) -> tuple[Program, Sampled, Fraction, str, int]:
    """The first design of this seed that is not refused; its gain at DC is known by construction."""
    draw = random.Random(seed)
    while True:
        order = draw.randint(1, 8)
        gain = Fraction(draw.choice((1, 1, 1, -2, 3, 40)), draw.choice((1, 1, 2, 3, 5, 8)))
        method = draw.choice(DC_KEEPING)
        family = draw.choice(("butterworth", "bessel", "inverse-chebyshev"))
        options = {"stop_db": fmpq(50)} if family == "inverse-chebyshev" else {}
        block = Lowpass(family=family, order=order, corner_hz=fmpq(1), **options)
        rate = fmpq(round(8 * 20 ** draw.random()))
        try:
            program, filtered = built((Gain(exact(gain)), block), rate, method, draw.choice((14, 16, 16, 24)))
        except Refused:
            continue
        return program, filtered, gain, method, order if family != "inverse-chebyshev" else order % 2


@pytest.mark.parametrize("seed", range(40))
def test_dc_gain_and_zeros_at_half_the_rate_of_low_passes(seed: int) -> None:
    """The full scales 10 V and 4 V put a factor of 5/2 into the integers, so 5 is among the odd factors."""
    program, filtered, gain, method, at_infinity = low_pass(seed)
    report = choice_report(program, filtered)
    missed = Kept(None, "DC gain", False) in report.gave_way
    assert (dc_gain(program, VOLTS) == gain) is not missed
    if missed:
        # only for the factor 3, and only where no sum of a denominator is 8 times that
        assert (gain * Fraction(5, 2)).denominator % 3 == 0
        assert max(sum(section.a) for section in program.sections) < 32
    assert report.dc_gain_error == pytest.approx(float(dc_gain(program, VOLTS) / gain - 1), abs=1e-15)
    if method in ("bilinear", "matched"):
        assert divides([1, 1], at_infinity, numerator(program))
    assert all(one.holds for one in report.properties if one.section is not None)


@pytest.mark.parametrize("order", range(1, 7))
def test_zeros_at_dc_of_high_passes(order: int) -> None:
    for method in ("bilinear", "matched", "zero-order-hold"):
        program, filtered = built((Highpass("butterworth", order, fmpq(30)),), 1000, method)
        kept = 1 if method == "zero-order-hold" else order
        assert divides([1, -1], kept, numerator(program))
        assert choice_report(program, filtered).dc_gain_error is None
        assert choice_report(program, filtered).gave_way == ()


@pytest.mark.parametrize("quality", [1, 5, 30, 200])
def test_zero_pair_of_a_notch_stays_on_the_circle(quality: int) -> None:
    program, filtered = built((Notch(fmpq(50), fmpq(quality)),), 1000, "bilinear")
    (section,) = program.sections
    assert section.b[0] == section.b[2]
    assert abs(section.b[1]) < 2 * section.b[0]
    assert dc_gain(program, VOLTS) == 1
    assert {one.name for one in choice_report(program, filtered).properties} == {"b0 = b2", "DC gain"}


def test_poles_on_the_circle() -> None:
    program, filtered = built((Integrator(), Lowpass("butterworth", 3, fmpq(40))), 1000, "zero-order-hold")
    assert divides([1, -1], 1, denominator(program))
    assert not divides([1, -1], 2, denominator(program))
    assert [one.name for one in choice_report(program, filtered).properties] == ["pole at z = 1"]
    undamped = sampled(ratio([1], [1, 0, 900]), 100, "bilinear")
    program = direct_program(undamped, Arithmetic(), Signals(), "probe")
    (section,) = program.sections
    assert section.a[2] == section.a[0]
    assert Kept(1, "pole pair on the unit circle", True) in choice_report(program, undamped).properties


def test_j211_channel_has_dc_gain_one() -> None:
    """SAE J211-1 (MAR95) Appendix C: a0 + a1 + a2 = 1 - b1 - b2, in its own signs, for every channel class."""
    factor = exact(reference("j211")["algorithm"]["factor_sae_j211"])
    corner = 60 * factor
    filtered = sampled(blocks(Lowpass("butterworth", 2, corner)), 10000, "bilinear", match_hz=corner)
    program = direct_program(filtered, Arithmetic(), Signals(), "cfc60")
    (section,) = program.sections
    assert section.b == (section.b[0], 2 * section.b[0], section.b[0])
    assert dc_gain(program, Signals()) == 1
    assert exact_dc_gain(filtered) == 1
    assert choice_report(program, filtered).chosen_error < 0.01


def test_bs1770_high_pass_has_its_double_zero_at_dc() -> None:
    """Rec. ITU-R BS.1770, Annex 1, Table 2: the numerator is 1, -2, 1."""
    analog = reference("bs1770")["stage2_analog"]
    corner = exact(analog["corner_frequency_hz"])
    model = ratio([1, 0, 0], [1, corner / exact(analog["q"]), corner**2], HERTZ)
    filtered = sampled(model, 48000, "bilinear", match_hz=corner)
    for bits in (24, 32):
        (section,) = direct_program(filtered, Arithmetic(coefficient_bits=bits), Signals(), "stage2").sections
        assert section.b == (section.b[0], -2 * section.b[0], section.b[0])
    with pytest.raises(Refused):
        direct_program(filtered, Arithmetic(coefficient_bits=16), Signals(), "stage2")


def test_dc_gain_that_no_nearby_integers_have_is_named() -> None:
    """997 is prime and longer than a few last places: the gain is met to a few parts in 10^5, and that is said."""
    program, filtered = built((Gain(fmpq(1000, 997)), Lowpass("butterworth", 4, fmpq(100))), 1000, "bilinear")
    report = choice_report(program, filtered)
    assert report.gave_way == (Kept(None, "DC gain", False),)
    assert 0 < abs(report.dc_gain_error) < 1e-4
    assert dc_gain(program, VOLTS) != Fraction(1000, 997)


def test_factors_are_handed_to_a_section_that_has_room_for_them() -> None:
    """100/33 times 5/2 has 3 and 11 below the line: more than one denominator's sum takes, not more than two take."""
    program, _ = built((Gain(fmpq(100, 33)), Lowpass("butterworth", 4, fmpq(100))), 1000, "bilinear")
    assert dc_gain(program, VOLTS) == Fraction(100, 33)
    sums = [sum(section.a) for section in program.sections]
    assert all(total % 33 for total in sums)
    assert sum(total % 11 == 0 for total in sums) == 1


def test_impulse_invariance_is_met_as_closely_as_the_words_allow() -> None:
    filtered = sampled(blocks(Lowpass("butterworth", 2, fmpq(1))), 20, "impulse-invariant")
    assert exact_dc_gain(filtered) is None
    program = direct_program(filtered, Arithmetic(), Signals(), "probe")
    report = choice_report(program, filtered)
    assert [one.name for one in report.properties] == []
    (section,) = program.sections
    assert 0 < abs(report.dc_gain_error) <= 0.5 / abs(sum(section.b))


def test_methods_that_lose_the_models_dc_gain() -> None:
    low = blocks(Lowpass("butterworth", 2, fmpq(1)))
    assert exact_dc_gain(sampled(low, 20, "matched")) == 1
    assert exact_dc_gain(sampled(low, 20, "matched", match_hz=1)) is None
    assert exact_dc_gain(sampled(low, 20, "bilinear", match_hz=1)) == 1
    ripple = blocks(Lowpass("chebyshev", 2, fmpq(1), ripple_db=fmpq(1)))
    assert exact_dc_gain(sampled(ripple, 20, "bilinear")) is None


@pytest.mark.parametrize(
    ("b", "a", "steps"),
    [
        ((3, 6, 3), (-1.2, 0.5), {(1, 2, 1)}),
        ((3, -6, 3), (-1.2, 0.5), {(1, -2, 1)}),
        ((3, 0, -3), (-1.2, 0.5), {(1, 0, -1)}),
        ((3, 1, 3), (-1.2, 0.5), {(1, 0, 1), (0, 1, 0)}),
        ((3, 1, -3), (-1.2, 0.5), {(1, 0, -1), (0, 1, 0)}),
        ((3, 4, 1), (-1.2, 0.5), {(1, 1, 0), (0, 1, 1)}),
        ((3, -4, 1), (-1.2, 0.5), {(1, -1, 0), (0, -1, 1)}),
        ((0, 2, -2), (-1.2, 0.5), {(0, 1, -1)}),
        ((0, 2, 1), (-1.2, 0.5), {(0, 1, 0), (0, 0, 1)}),
    ],
    ids=str,
)
def test_steps_of_a_numerator(b: tuple[int, ...], a: tuple[float, ...], steps: set[tuple[int, int, int]]) -> None:
    (section,) = exact_sections(PlainSampled(((b, a),)))
    found = lattice(section, 8, 14, None)
    assert set(found.b_steps) == steps
    assert set(found.a_steps) == {(0, 1, 0), (0, -1, 1)}
    assert found.integers(found.start).b == tuple(256 * x for x in b)


@pytest.mark.parametrize("seed", range(25))
def test_the_free_lattice_starts_at_the_nearest_integers(seed: int) -> None:
    nearest = random_program(seed)
    for one in nearest.sections:
        b, a = ([fmpq(x) / one.a[0] for x in group] for group in (one.b, one.a))
        (section,) = exact_sections(PlainSampled(((b, a[1:]),)))
        found = lattice(section, one.a_fraction_bits, one.a_fraction_bits, None)
        assert found.integers(found.start).b == one.b
        assert found.integers(found.start).a == one.a
