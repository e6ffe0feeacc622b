"""Worked examples of textbooks: Proakis and Manolakis, Digital Signal Processing, section 8.3; Ramesh Babu, Digital
Signal Processing, Example 5.11."""

import numpy as np
import pytest
from flint import arb, fmpz

from afterkick.design import schema
from afterkick.numbers import working_bits
from helpers import blocks, exact, overlap, ratio, reference, sampled, section_floats

DATA = reference("small_examples")


def numbers(values: list[object]) -> list[float]:
    return [float(x) for x in values]  # type: ignore[arg-type]


def test_babu_impulse_invariance() -> None:
    """Ramesh Babu, Example 5.11: 2/((s+1)(s+2)) at T = 1 s, where h(0) = 0 and both rules agree."""
    case = DATA["babu_impulse_invariance"]
    model = ratio(case["analog_num"], case["analog_den"])
    for rule in ("half", "full"):
        (section,) = sampled(
            model, 1 / exact(case["sample_period_s"]), "impulse-invariant", first_sample=rule
        ).sections(80)
        b, a = section_floats(section)
        assert b[:2] == pytest.approx(numbers(case["digital_num_zinv"]), abs=1e-16)
        assert b[2] == 0
        assert a == pytest.approx(numbers(case["digital_den_zinv"]), abs=1e-16)
        # the book cuts 0.0498 to 0.0497
        assert [b[1], a[1], a[2]] == pytest.approx(numbers(case["printed_digits"]), abs=5e-4)


def test_proakis_single_pole_low_pass() -> None:
    """Proakis and Manolakis, section 8.3 (from memory, recomputed): a lag matched at 0.2 pi rad a sample."""
    case = DATA["proakis_single_pole_bilinear"]
    lag = blocks(schema.Lag(corner_hz=exact("0.1")))
    (section,) = sampled(lag, 1, "bilinear", match_hz="0.1").sections(80)
    b, a = section_floats(section)
    assert b[:2] == pytest.approx([float(case["recomputed_gain"])] * 2, abs=5.1e-9)
    assert a[:2] == pytest.approx(numbers(case["recomputed_den"]), abs=5.1e-9)
    assert [b[0], a[1]] == pytest.approx([float(case["printed_gain"]), float(case["printed_den"][1])], abs=6e-4)
    assert 2 * np.tan(0.1 * np.pi) == pytest.approx(float(case["analog_cutoff_times_T"]), abs=5e-4)


def test_proakis_resonator_bilinear() -> None:
    """Proakis and Manolakis, section 8.3: exact rationals.  A remembered 0.975 in place of the square 0.95123 of that
    pole radius must not come out."""
    case = DATA["proakis_resonator_bilinear"]
    model = ratio(case["analog_num"], case["analog_den"])
    filtered = sampled(model, 1 / exact(case["sample_period_s"]), "bilinear")
    (section,) = filtered.sections(120)
    scale = exact(case["exact_den_times_32p81"][0])
    with working_bits(200):
        for found, times in ((section.b, case["exact_num_times_32p81"]), (section.a, case["exact_den_times_32p81"])):
            assert overlap(found, [arb(exact(y) / scale) for y in times])
    b, a = section_floats(section)
    assert b == pytest.approx(numbers(case["recomputed_num"]), abs=5.1e-8)
    assert a == pytest.approx(numbers(case["recomputed_den"]), abs=5.1e-8)
    assert abs(a[2] - 0.975) > 0.02
    transfer = filtered.transfer()
    assert sorted(float(zero.value.real) for zero in transfer.zeros) == pytest.approx(numbers(case["zeros"]), abs=1e-15)
    assert float(abs(transfer.poles[0].value)) == pytest.approx(float(case["pole_radius"]), abs=5.1e-9)
    assert fmpz(-1) in [zero.value.real.unique_fmpz() for zero in transfer.zeros]


def test_proakis_impulse_invariance() -> None:
    """Proakis and Manolakis, section 8.3: (s+0.1)/((s+0.1)^2+9) at T = 0.1 s; in the book without T, h(0+) whole."""
    case = DATA["proakis_impulse_invariance"]
    model = ratio(case["analog_num"], case["analog_den"])
    period = exact(case["sample_period_s"])
    (section,) = sampled(model, 1 / period, "impulse-invariant", first_sample="full").sections(80)
    b, a = section_floats(section)
    assert b[:2] / float(period) == pytest.approx(numbers(case["digital_num"]), abs=1e-15)
    assert a == pytest.approx(numbers(case["digital_den"]), abs=1e-15)
    half = sampled(model, 1 / period, "impulse-invariant")
    (section,) = half.sections(80)
    assert float(section.b[0]) == pytest.approx(float(period) / 2, rel=1e-15)
