"""IEC 61260-1:2014: acceptance limits of octave and third-octave filters."""

import numpy as np
import pytest
from flint import arb

from afterkick.design import schema
from afterkick.model.model import Model
from afterkick.numbers import working_bits
from helpers import analog_db, blocks, digital_db, exact, reference, sampled

DATA = reference("iec61260")
LIMITS = DATA["limits_2014"]
RATIO = 10**0.3
MIDBAND_HZ = 1000


def band_filter(bands: int) -> Model:
    """Order 3 (six poles), edges at the midband frequency times G^(+-1/(2 bands)), G = 10^0.3."""
    with working_bits(200):
        factor = exact((arb(10).log() * 3 / (20 * bands)).exp().str(40, radius=False))
    edges = schema.Bandpass(family="butterworth", order=3, low_hz=MIDBAND_HZ / factor, high_hz=MIDBAND_HZ * factor)
    return blocks(edges)


def break_ratio(exponent: float, bands: int) -> float:
    """IEC 61260-1 formula for fractional-octave break frequencies, from those of the octave."""
    octave = RATIO**exponent
    return 1 + (RATIO ** (1 / (2 * bands)) - 1) / (RATIO**0.5 - 1) * (octave - 1)


def verdicts(levels_db: np.ndarray, reference_db: float) -> list[bool]:
    attenuation = reference_db - levels_db
    low = [float(x) for x in LIMITS["class1_min_attenuation_db"]]
    high = [float(x) for x in LIMITS["class1_max_attenuation_db"]]
    return [a <= x <= b for x, a, b in zip(attenuation, low, high, strict=True)]


def test_third_octave_break_frequencies() -> None:
    """IEC 61260-1 Table of third-octave break frequencies, base 10, five printed decimals."""
    table = DATA["third_octave_break_frequency_ratio"]
    found = [break_ratio(float(x), 3) for x in table["exponent"]]
    assert found == pytest.approx([float(x) for x in table["base10_upper"]], abs=5.1e-6)


# At 0.5 the table has the limits just inside and just outside the edge: the filter's edge lies between.
EXPONENTS = [
    float(x) * (1 + shift) for x, shift in zip(LIMITS["exponent"], [0] * 4 + [-1e-6, 1e-6] + [0] * 4, strict=True)
]


@pytest.mark.parametrize("side", [1, -1], ids=["above", "below"])
@pytest.mark.parametrize("bands", [1, 3], ids=["octave", "third-octave"])
def test_analog_filter_meets_class_1(bands: int, side: int) -> None:
    """IEC 61260-1:2014 Table 1 at every breakpoint."""
    model = band_filter(bands)
    frequencies = [MIDBAND_HZ * break_ratio(x, bands) ** side for x in EXPONENTS]
    assert all(verdicts(analog_db(model, frequencies), 0.0))


@pytest.mark.parametrize("side", [1, -1], ids=["above", "below"])
@pytest.mark.parametrize("bands", [1, 3], ids=["octave", "third-octave"])
def test_bilinear_filter_meets_class_1(bands: int, side: int) -> None:
    """IEC 61260-1:2014 Table 1 with the frequency axis matched at the midband frequency, 96 kHz."""
    filtered = sampled(band_filter(bands), 96000, "bilinear", match_hz=MIDBAND_HZ)
    frequencies = [MIDBAND_HZ * break_ratio(x, bands) ** side for x in EXPONENTS]
    assert all(verdicts(digital_db(filtered, frequencies), 0.0))


def test_too_low_an_order_fails_class_1() -> None:
    """Order 2 lacks the attenuation of IEC 61260-1:2014 Table 1 far from the band, so the check can fail."""
    low, high = MIDBAND_HZ / exact("1.41"), MIDBAND_HZ * exact("1.41")
    model = blocks(schema.Bandpass(family="butterworth", order=2, low_hz=low, high_hz=high))
    assert not all(verdicts(analog_db(model, [MIDBAND_HZ * break_ratio(x, 1) for x in EXPONENTS]), 0.0))


@pytest.mark.parametrize("bands", [1, 3])
def test_edges_are_3_db_down(bands: int) -> None:
    """A Butterworth band-pass is 10 log10 2 = 3.0103 dB down at both edges, 0 dB at midband (common practice)."""
    model = band_filter(bands)
    edge = RATIO ** (1 / (2 * bands))
    levels = analog_db(model, [MIDBAND_HZ / edge, MIDBAND_HZ, MIDBAND_HZ * edge])
    assert levels == pytest.approx([-10 * np.log10(2), 0.0, -10 * np.log10(2)], abs=1e-9)
