"""Recommendation ITU-R BS.1770, Annex 1: the two printed biquads at 48 kHz, rebuilt from their analog parameters."""

from decimal import Decimal

import numpy as np
import pytest

from afterkick.model.roots import HERTZ
from afterkick.sampling import Sampled
from helpers import digital_db, exact, ratio, reference, run, sampled

DATA = reference("bs1770")


def stage(number: int) -> Sampled:
    """Stage 1 is (Vh x^2 + Vb x f/Q + Vl f^2) / (x^2 + x f/Q + f^2) in x = s / 2 pi, stage 2 x^2 over the same form."""
    analog = DATA["stage1_analog" if number == 1 else "stage2_analog"]
    corner = exact(analog["corner_frequency_hz"])
    width = corner / exact(analog["q"])
    top = [1, 0, 0]
    if number == 1:
        high, band, low = (exact(analog[f"{name}_gain_linear"]) for name in ("high", "band", "low"))
        top = [high, band * width, low * corner**2]
    return sampled(ratio(top, [1, width, corner**2], HERTZ), 48000, "bilinear", match_hz=corner)


def rounded(value: object) -> Decimal:
    return Decimal(str(value.mid().str(25, radius=False))).quantize(Decimal("1e-14"))  # type: ignore[attr-defined]


def test_shelving_stage_to_every_printed_digit() -> None:
    """BS.1770 Table 1."""
    (section,) = stage(1).sections(100)
    printed = DATA["stage1_shelf_48khz"]
    assert [rounded(x) for x in section.b] == printed["b"]
    assert [rounded(x) for x in section.a] == printed["a"]


def test_high_pass_stage_to_every_printed_digit() -> None:
    """BS.1770 Table 2: the numerator is printed without its common factor."""
    (section,) = stage(2).sections(100)
    printed = DATA["stage2_highpass_48khz"]
    factor = exact(DATA["stage2_analog"]["numerator_factor_removed_linear"])
    assert [rounded(x) for x in section.a] == printed["a"]
    assert float(section.b[0]) == pytest.approx(
        float(DATA["stage2_analog"]["numerator_factor_removed_linear"]), rel=2e-15
    )
    assert np.allclose([float(x / factor) for x in section.b], [float(x) for x in printed["b"]], rtol=0, atol=5e-15)


def test_gain_of_the_cascade() -> None:
    """The 0.691 dB at 997 Hz of the loudness formula (BS.1770 Annex 1), and levels recomputed from the printed digits.

    They are those of the standard's numerator 1, -2, 1, whose common factor was removed.
    """
    table = DATA["recomputed_cascade_response"]
    frequencies = [float(f) for f in table["frequency_hz"]]
    removed = 20 * np.log10(float(DATA["stage2_analog"]["numerator_factor_removed_linear"]))
    levels = digital_db(stage(1), frequencies) + digital_db(stage(2), frequencies) - removed
    assert np.allclose(levels, [float(x) for x in table["level_db"]], rtol=0, atol=1e-6)
    assert round(levels[frequencies.index(997.0)], 3) == 0.691


def test_absolute_sums_of_the_pulse_responses() -> None:
    """Sums of |h[n]| recomputed from the printed coefficients."""
    table = DATA["recomputed_l1_norm"]
    # The double pole at 0.99502 leaves 0.99502^8000, about 1e-17.
    kick = [1] + [0] * 8000
    one, two = (stage(number).sections(160) for number in (1, 2))
    removed = float(DATA["stage2_analog"]["numerator_factor_removed_linear"])
    sums = [sum(abs(float(x)) for x in run(sections, kick)) for sections in (one, two, one + two)]
    assert sums[0] == pytest.approx(float(table["stage1_linear"]), abs=2e-10)
    assert sums[1] / removed == pytest.approx(float(table["stage2_linear"]), abs=2e-10)
    assert sums[2] / removed == pytest.approx(float(table["cascade_linear"]), abs=2e-10)
