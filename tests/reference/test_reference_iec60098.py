"""IEC 60098 (RIAA) disc replay characteristic: time constants 3180, 318 and 75 microseconds."""

import numpy as np
import pytest
from flint import fmpq

from afterkick.design import schema
from afterkick.model.model import Model
from helpers import analog_db, blocks, digital_db, exact, reference, sampled

DATA = reference("iec60098")
CONSTANTS = {key: exact(value) for key, value in DATA["time_constants"].items()}
TABLE = DATA["recomputed_from_constants"]
LEVELS = np.array([float(x) for x in TABLE["level_db"]])


def replay(amendment: bool = False) -> Model:
    parts: list[schema.Block] = [
        schema.Ratio(numerator=(CONSTANTS["zero_mid_s"], fmpq(1)), denominator=(CONSTANTS["pole_low_s"], fmpq(1))),
        schema.Lag(time_constant_s=CONSTANTS["pole_high_s"]),
    ]
    if amendment:
        # 7950 microseconds as a resistor and a capacitor
        parts.append(schema.RcHighpass(ohm=fmpq(7950), farad=CONSTANTS["iec_amendment_highpass_s"] / 7950))
    return blocks(*parts)


def test_levels() -> None:
    """IEC 60098 replay levels, 0 dB at 1 kHz, recomputed from its time constants."""
    model = replay()
    assert analog_db(model, TABLE["frequency_hz"]) - analog_db(model, [1000.0]) == pytest.approx(LEVELS, abs=0.001)


def test_gain_and_corner_frequencies() -> None:
    """The loss from 0 Hz to 1 kHz, and the corners 50.05, 500.5 and 2122 Hz of the time constants."""
    model = replay()
    assert model.dc_gain == 1
    assert analog_db(model, [1000.0])[0] == pytest.approx(float(CONSTANTS["gain_at_1khz_relative_to_dc_db"]), abs=1e-9)
    found = sorted(-float(root.evaluate().real) / (2 * np.pi) for root in (*model.poles, *model.zeros))
    wanted = [float(CONSTANTS[key]) for key in ("pole_low_hz", "zero_mid_hz", "pole_high_hz")]
    assert found == pytest.approx(wanted, rel=1e-9)


def test_amended_low_end() -> None:
    """The IEC amendment adds a 7950 microsecond high-pass."""
    model = replay(amendment=True)
    level = analog_db(model, [20.0])[0] - analog_db(replay(), [1000.0])[0]
    assert level == pytest.approx(float(TABLE["iec_amendment_level_at_20hz_db"]), abs=0.003)


def test_bilinear_droops_and_matched_delay_rises_near_half_the_rate() -> None:
    """At 48 kHz, against the recomputed levels: within 0.1 dB up to 2.5 kHz by either, far apart at 20 kHz, where the
    zero of the bilinear map at half the rate pulls the level down (common practice)."""
    model = replay()
    errors = {}
    for method, options in (("bilinear", {}), ("matched", {"zeros_at_infinity": "delay"})):
        levels = digital_db(sampled(model, 48000, method, **options), [*TABLE["frequency_hz"], 1000.0])
        errors[method] = levels[:-1] - levels[-1] - LEVELS
        low = np.array([f <= 2500 for f in TABLE["frequency_hz"]])
        assert np.abs(errors[method][low]).max() < 0.1
    assert errors["bilinear"][-1] < -4
    assert errors["matched"][-1] > 1
