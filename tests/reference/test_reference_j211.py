"""SAE J211-1 (MAR95) Appendix C and ISO 6487:2002 Annex A: the two-pole low-pass of a channel frequency class."""

from typing import Any

import pytest
from flint import arb

from afterkick.design import schema
from afterkick.numbers import working_bits
from afterkick.sampling import Sampled
from helpers import blocks, digital_db, exact, overlap, reference, sampled

DATA = reference("j211")
FACTORS = {"SAE J211": DATA["algorithm"]["factor_sae_j211"], "ISO 6487": DATA["algorithm"]["factor_iso_6487"]}
RATE_HZ = 10000


def channel(cfc: int, standard: str = "SAE J211", rate_hz: int = RATE_HZ) -> Sampled:
    corner = cfc * exact(FACTORS[standard])
    model = blocks(schema.Lowpass(family="butterworth", order=2, corner_hz=corner))
    return sampled(model, rate_hz, "bilinear", match_hz=corner)


def row_name(row: dict[str, Any]) -> str:
    return f"{row['standard']}-{row['cfc']}"


@pytest.mark.parametrize("row", DATA["recomputed_coefficients"], ids=row_name)
def test_coefficients(row: dict[str, Any]) -> None:
    """The formulas of SAE J211-1 Appendix C, in balls, and their values in doubles.

    The standard writes y[n] = a0 x[n] + a1 x[n-1] + a2 x[n-2] + b1 y[n-1] + b2 y[n-2].
    """
    (section,) = channel(row["cfc"], row["standard"]).sections(100)
    with working_bits(300):
        wa = (arb.pi() * arb(row["cfc"] * exact(FACTORS[row["standard"]]) / RATE_HZ)).tan()
        root2 = arb(2).sqrt()
        d = 1 + root2 * wa + wa * wa
        a0 = wa * wa / d
        assert overlap(section.b, [a0, 2 * a0, a0])
        assert overlap(section.a, [arb(1), 2 * (wa * wa - 1) / d, -(-1 + root2 * wa - wa * wa) / d])
    assert float(section.b[0]) == pytest.approx(float(row["a0"]), rel=4e-16)
    assert -float(section.a[1]) == pytest.approx(float(row["b1"]), rel=4e-16)
    assert -float(section.a[2]) == pytest.approx(float(row["b2"]), rel=4e-16)


@pytest.mark.parametrize(
    "row", [row for row in DATA["recomputed_coefficients"] if "two_pass_level_db" in row], ids=row_name
)
def test_two_pass_levels(row: dict[str, Any]) -> None:
    """Run forwards and backwards, the section's level counts twice (recomputed from the formulas)."""
    levels = 2 * digital_db(channel(row["cfc"]), row["two_pass_frequency_hz"])
    assert levels == pytest.approx([float(x) for x in row["two_pass_level_db"]], abs=6e-4)


def test_class_table() -> None:
    """SAE J211-1 class table: two passes are 3 dB down at CFC / 0.6, and lose less than 1 dB at the pass frequency.

    So do the lower classes at 10 kHz; CFC 1000 is warped to -2.45 dB at 1667 Hz.
    """
    table = DATA["class_table"]
    for cfc, passed in zip(table["cfc"][:2], table["pass_frequency_fh_hz"], strict=False):
        at_pass, at_cutoff = 2 * digital_db(channel(cfc), [passed, cfc / 0.6])
        assert -1.0 <= at_pass <= 0.0
        assert at_cutoff == pytest.approx(-3.01, abs=0.02)
    assert 2 * digital_db(channel(1000), [1000 / 0.6])[0] == pytest.approx(-2.45, abs=0.005)
    for cfc, least in zip(table["cfc"][:2], table["stopband_attenuation_db"], strict=False):
        assert 2 * digital_db(channel(cfc), [5 * cfc])[0] < float(least)


def test_corner_factor() -> None:
    """2.0775 is (5/3) / (sqrt 2 - 1)^(1/4): two passes, each 1.505 dB down at CFC / 0.6 (common practice)."""
    factor = (5 / 3) / (2**0.5 - 1) ** 0.25
    assert round(factor, 4) == float(FACTORS["SAE J211"])
    assert 2 * digital_db(channel(60, rate_hz=10**6), [100.0])[0] == pytest.approx(-3.0103, abs=2e-4)
