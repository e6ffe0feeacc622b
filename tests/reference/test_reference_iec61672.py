"""IEC 61672-1: the frequency weightings A and C."""

import numpy as np
import pytest
from flint import fmpq

from afterkick.design import schema
from afterkick.model.model import Model
from helpers import analog_db, digital_db, exact, model_from, reference, sampled

DATA = reference("iec61672")
# The tables hold at f = 1000 * 10^(n/10), not at the nominal frequencies.
FREQUENCIES_HZ = [1000 * 10 ** (n / 10) for n in range(-20, 14)]
LIMITS = {
    "2002": (DATA["table"]["class1_lower_2002_db"], DATA["table"]["class1_upper_2002_db"]),
    "2013": (DATA["class1_2013_from_memory"]["lower_db"], DATA["class1_2013_from_memory"]["upper_db"]),
}


def weighting(name: str) -> Model:
    """A: f1 and f4 twice, f2, f3, and four zeros at the origin; C: f1 and f4 twice and two zeros."""
    f = [exact(DATA["poles"][f"f{k}_hz"]) for k in (1, 2, 3, 4)]
    poles = [f[0], f[0], f[3], f[3]] + (f[1:3] if name == "A" else [])
    zeros = 4 if name == "A" else 2
    zero = fmpq(0)
    form = schema.RootsForm(poles=tuple((-p, zero) for p in poles), zeros=((zero, zero),) * zeros, unit="Hz")
    return model_from(form)


def numbers(values: list[object]) -> np.ndarray:
    return np.array([float(x) for x in values])  # type: ignore[arg-type]


@pytest.mark.parametrize("name", ["A", "C"])
def test_table_to_the_printed_tenth(name: str) -> None:
    """IEC 61672-1:2013 Table 3, all 34 rows; the exact poles are those of its Annex E."""
    model = weighting(name)
    levels = analog_db(model, FREQUENCIES_HZ) - analog_db(model, [1000.0])
    assert np.round(levels, 1) == pytest.approx(numbers(DATA["table"][f"{name.lower()}_level_db"]), abs=1e-9)


@pytest.mark.parametrize("name", ["A", "C"])
def test_level_at_1_khz(name: str) -> None:
    """IEC 61672-1 Annex E: -2.000 dB and -0.062 dB with f4^2 in front, here to the recomputed digits."""
    f4 = float(DATA["poles"]["f4_hz"])
    level = analog_db(weighting(name), [1000.0])[0] + 20 * np.log10((2 * np.pi * f4) ** 2)
    assert level == pytest.approx(float(DATA["poles"][f"{name.lower()}_at_1khz_recomputed_db"]), abs=1e-11)


def test_poles_follow_from_the_reference_frequencies() -> None:
    """IEC 61672-1:2013 Annex E: f_r = 1000 Hz, f_L = 10^1.5, f_H = 10^3.9, f_A = 10^2.45, D^2 = 1/2."""
    f_r, f_l, f_h, f_a, d = 1000.0, 10**1.5, 10**3.9, 10**2.45, 0.5**0.5
    b = (f_r**2 + f_l**2 * f_h**2 / f_r**2 - d * (f_l**2 + f_h**2)) / (1 - d)
    c = f_l**2 * f_h**2
    f4 = ((-b + (b * b - 4 * c) ** 0.5) / 2) ** 0.5
    expected = [f_l * f_h / f4, (3 - 5**0.5) / 2 * f_a, (3 + 5**0.5) / 2 * f_a, f4]
    assert expected == pytest.approx([float(DATA["poles"][f"f{k}_hz"]) for k in (1, 2, 3, 4)], rel=1e-11)


@pytest.mark.parametrize("edition", ["2002", "2013"])
@pytest.mark.parametrize("rate_hz", [44100, 48000, 96000])
@pytest.mark.parametrize("name", ["A", "C"])
def test_plain_bilinear_passes_class_1(name: str, rate_hz: int, edition: str) -> None:
    """Class 1 limits of IEC 61672-1:2002 Table 2 and, from memory, of 2013 Table 3."""
    model = weighting(name)
    levels = digital_db(sampled(model, rate_hz, "bilinear"), [*FREQUENCIES_HZ, 1000.0])
    deviation = levels[:-1] - levels[-1] - numbers(DATA["table"][f"{name.lower()}_level_db"])
    lower, upper = (numbers(limit) for limit in LIMITS[edition])
    assert ((lower <= deviation) & (deviation <= upper)).all()


def test_error_of_the_plain_bilinear() -> None:
    """Recomputed: what frequency warping takes from A at 48 kHz."""
    table = DATA["bilinear_error_at_48khz"]
    frequencies = [1000 * 10 ** (n / 10) for n in (9, 11, 12)] + [1000.0]
    model = weighting("A")
    error = digital_db(sampled(model, 48000, "bilinear"), frequencies) - analog_db(model, frequencies)
    assert np.round(error[:3] - error[3], 2) == pytest.approx(numbers(table["error_db"]), abs=1e-9)


@pytest.mark.parametrize("name", ["A", "C"])
def test_matched_keeps_the_shape_below_a_tenth_of_the_rate(name: str) -> None:
    """Poles by e^(sT): at 96 kHz, zeros at infinity left there, class 1 holds too (IEC 61672-1:2002 Table 2)."""
    model = weighting(name)
    filtered = sampled(model, 96000, "matched", match_hz=1000, zeros_at_infinity="delay")
    deviation = digital_db(filtered, FREQUENCIES_HZ) - analog_db(model, [1000.0])[0]
    deviation -= numbers(DATA["table"][f"{name.lower()}_level_db"])
    lower, upper = (numbers(limit) for limit in LIMITS["2002"])
    inside = (lower <= deviation) & (deviation <= upper)
    assert inside[:30].all()
