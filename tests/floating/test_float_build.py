"""Coefficients in single precision: what is rounded, kept and refused."""

import mpmath
import numpy as np
import pytest
from flint import fmpq

from afterkick.design import schema
from afterkick.design.schema import Signal, Signals
from afterkick.errors import Refused
from afterkick.floating import FloatProgram, float_dc_gain, float_program, realised_float
from afterkick.floating.program import FloatProduct, FloatSum
from afterkick.model.roots import HERTZ
from fixed.random_designs import PlainSampled
from floating.random_filters import random_filter
from helpers import blocks, digital_db, exact, ratio, reference, sampled


def built(*sections, marginal=False, delay=0, signals=None, **options) -> FloatProgram:
    """The program of sections given as (b, a[1:])."""
    plain = PlainSampled(tuple(sections), delay, marginal)
    return float_program(plain, signals or Signals(), "probe", **options)


def rounded(value: mpmath.mpf) -> float:
    with mpmath.workprec(24):
        return float(+value)


@pytest.mark.parametrize(("corner_hz", "rate_hz"), [(100, 1000), (100, 48000), (3, 10000), (1000, 44100)])
def test_low_pass_by_hand(corner_hz, rate_hz):
    """The bilinear transform of a Butterworth low-pass with its corner matched, written out (textbook algebra)."""
    model = blocks(schema.Lowpass(family="butterworth", order=2, corner_hz=fmpq(corner_hz)))
    program = float_program(sampled(model, rate_hz, "bilinear", match_hz=corner_hz), Signals(), "probe")
    with mpmath.workprec(300):
        k = mpmath.tan(mpmath.pi * corner_hz / rate_hz)
        bottom = 1 + mpmath.sqrt(2) * k + k * k
        a1, a2 = 2 * (k * k - 1) / bottom, (1 - mpmath.sqrt(2) * k + k * k) / bottom
        stored = [rounded(a1), rounded(a2)]
        # the numerator takes part in what rounding does to 1 + a1 + a2
        gain = k * k / bottom * (1 + mpmath.mpf(stored[0]) + stored[1]) / (1 + a1 + a2)
        wanted = [rounded(gain), rounded(2 * gain), rounded(gain)]
    (section,) = program.sections
    assert list(section.a) == [1.0, *stored]
    assert list(section.b) == wanted
    dc_gain = float_dc_gain(program)
    assert abs(float(dc_gain) - 1) <= 2**-24


def test_one_pole_keeps_its_gain_exactly():
    model = blocks(schema.Lag(corner_hz=fmpq(1)))
    program = float_program(sampled(model, 5000, "zero-order-hold"), Signals(), "probe")
    (section,) = program.sections
    assert section.a[1] == -float(np.float32(float(mpmath.exp(-2 * mpmath.pi / 5000))))
    assert float_dc_gain(program) == 1


def test_loudness_weighting():
    """Recommendation ITU-R BS.1770, Annex 1, Tables 1 and 2: 14 printed decimals decide every single."""
    data = reference("bs1770")
    for number in (1, 2):
        analog = data[f"stage{number}_analog"]
        corner = exact(analog["corner_frequency_hz"])
        width = corner / exact(analog["q"])
        top = [1, 0, 0]
        if number == 1:
            high, band, low = (exact(analog[f"{name}_gain_linear"]) for name in ("high", "band", "low"))
            top = [high, band * width, low * corner**2]
        stage = sampled(ratio(top, [1, width, corner**2], HERTZ), 48000, "bilinear", match_hz=corner)
        program = float_program(stage, Signals(), "loudness")
        (section,) = program.sections
        printed = data["stage1_shelf_48khz" if number == 1 else "stage2_highpass_48khz"]
        assert list(section.a) == [float(np.float32(float(x))) for x in printed["a"]]
        factor = 1.0 if number == 1 else float(data["stage2_analog"]["numerator_factor_removed_linear"])
        assert list(section.b) == [float(np.float32(float(x) * factor)) for x in printed["b"]]
        # singles stay within a hundredth of a decibel of the exact filter over the band of the standard
        frequencies = [38.0, 100.0, 997.0, 10000.0, 20000.0]
        realised = realised_float(program, stage)
        assert np.abs(digital_db(realised, frequencies) - digital_db(stage, frequencies)).max() < 0.01


@pytest.mark.parametrize("zero", [1, -1])
def test_zero_at_dc_and_half_the_rate_is_kept(zero):
    """b0 (1 - zero/z)(1 - c/z): rounded one by one the terms would leave up to two last places at the zero."""
    lost = 0
    for k in range(60):
        c = zero * fmpq(9 * k + 1, 547)
        b = [fmpq(1, 3), -fmpq(1, 3) * (zero + c), fmpq(1, 3) * zero * c]
        (section,) = built((b, [fmpq(-3, 2), fmpq(9, 16)])).sections  # exact in singles: no share in its rounding
        b0, b1, b2 = section.exact_b
        assert b0 + zero * b1 + b2 == 0
        assert all(float(np.float32(x)) == x for x in section.b)
        singles = [float(np.float32(float(x))) for x in b]
        lost += singles[0] + zero * singles[1] + singles[2] != 0
        assert np.abs(np.array(section.b) - singles).max() <= 2 * np.spacing(np.float32(max(map(abs, singles))))
    assert lost > 10


@pytest.mark.parametrize("pole", [1, -1])
def test_pole_at_dc_and_half_the_rate_is_kept(pole):
    for k in range(1, 40):
        other = fmpq(7 * k, 300)
        (section,) = built(([1], [-(pole + other), pole * other]), marginal=True).sections
        a0, a1, a2 = section.exact_a
        assert a0 + pole * a1 + a2 == 0
        assert section.marginal
    assert float_dc_gain(built(([1], [-1]), marginal=True)) is None


def test_pair_on_the_circle_is_kept():
    (section,) = built(([1], [fmpq(-17, 10), 1]), marginal=True).sections
    assert section.a[2] == 1.0


def near_one(distance: fmpq) -> list[fmpq]:
    """A double pole at 1 - distance."""
    return [-2 * (1 - distance), (1 - distance) ** 2]


def test_lost_poles_are_refused_with_remedies():
    """(1 - distance)^2 keeps distance^2 / 2^-23 last places of 1 + a1 + a2."""
    built(([1], near_one(fmpq(1, 500))))
    with pytest.raises(Refused, match=r"1 \+ a1 \+ a2 keeps [0-3] significant bits") as refusal:
        built(([1], near_one(fmpq(1, 1500))))
    (problem,) = refusal.value.problems
    assert "fixed" in problem.remedy
    assert "delta" in problem.remedy
    assert "rate" in problem.remedy
    with pytest.raises(Refused, match="on or outside the unit circle"):
        built(([1], [0, 1 - fmpq(1, 2**30)]))
    with pytest.raises(Refused, match="no pole is outside"):
        built(([1], [0, 1 + fmpq(1, 2**30)]))
    assert built(([1], [0, fmpq(5, 4)])).sections[0].a[2] == 1.25


def test_range_of_singles():
    tiny, huge = fmpq(1, 10**39), fmpq(10**39)
    for gain in (tiny, huge):
        with pytest.raises(Refused, match=r"magnitude of about 2\^"):
            built(([gain], []))
    # far below the rest of its group, and so no loss
    (section,) = built(([1, tiny], [tiny])).sections
    assert section.b == (1.0, 0.0, 0.0)
    assert section.a == (1.0, 0.0, 0.0)
    assert [c.name for c in section.coefficients] == ["b0", "b1", "a1"]
    with pytest.raises(Refused, match="largest input"):
        built(([1], []), signals=Signals(Signal("V", huge)))
    for threshold in (fmpq(0), fmpq(1, 10**39), fmpq(2)):
        with pytest.raises(Refused, match="flush_below"):
            built(([1], []), flush_below=threshold)
    with pytest.raises(Refused) as refusal:
        built(([huge], []), ([tiny], []), delay=257)
    assert len(refusal.value.problems) == 3


def test_trivial_factors_cost_nothing_and_equal_ones_are_shared():
    def products(*section) -> list[str]:
        return [step.dest for step in built(section).steps if isinstance(step, FloatProduct)]

    assert products([1, -2, 1], [-0.5]) == ["b1_x", "a1_y"]
    assert products([0.3, 0.6, 0.3], [-0.5, 0.25]) == ["b0_x", "b1_x", "a1_y", "a2_y"]
    assert products([0.3, 0, -0.3], [0, 0.25]) == ["b0_x", "a2_y"]
    assert products([1], []) == []
    (shared,) = built(([0.3, 0, -0.3], [])).sections
    assert shared.steps[-1] == FloatSum("s1_2", ((-1, "b0_x"),))
    assert built(([1], [])).states == ()
    assert built(([0.5, 0.5], [-0.25]), delay=2).states == ("x_1", "x_2", "s1_1")


@pytest.mark.parametrize("seed", range(30))
def test_realised_filter_is_that_of_the_coefficients(seed):
    program, plain = random_filter(seed)
    model = blocks(schema.Lag(corner_hz=fmpq(1)))
    realised = realised_float(program, sampled(model, 1000, "bilinear"))
    inverse_z = np.exp(-2j * np.pi * np.array([0.013, 0.21, 0.44]))
    wanted = np.ones(3, complex)
    for section in program.sections:
        wanted *= np.polyval(section.b[::-1], inverse_z) / np.polyval(section.a[::-1], inverse_z)
    found = np.ones(3, complex)
    for section in realised.sections(80):
        b, a = ([float(x) for x in group] for group in (section.b, section.a))
        found *= np.polyval(b[::-1], inverse_z) / np.polyval(a[::-1], inverse_z)
    assert np.allclose(found, wanted, rtol=1e-9, atol=0)
    for section, exact_section in zip(program.sections, plain.sections(100), strict=True):
        assert all(abs(c.error_last_places) <= 0.5 for c in section.coefficients if c.name.startswith("a"))
        assert np.allclose(section.a, [float(x) for x in exact_section.a], rtol=2**-24, atol=0)
