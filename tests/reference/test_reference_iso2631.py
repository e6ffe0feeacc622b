"""ISO 2631-1 and ISO 8041: frequency weightings of human vibration."""

import numpy as np
import pytest
from flint import fmpq

from afterkick.design import schema
from afterkick.model.blocks import block_factors
from afterkick.model.factors import constant, from_polynomials, product
from afterkick.model.model import Model, build
from afterkick.model.roots import HERTZ
from helpers import analog_db, blocks, digital_db, exact, polynomial, reference, sampled

DATA = reference("iso2631")
PARAMETERS = DATA["parameters"]
TABLES = {"Wk": DATA["table_wk"], "Wd": DATA["table_wd"], "Wf": DATA["table_wf"]}


def weighting(name: str) -> Model:
    """Band limiting, acceleration-velocity transition and upward step; what is infinite is absent."""
    given = {key: exact(value) for key, value in PARAMETERS[name].items() if value.is_finite()}
    one = fmpq(1)
    band = [
        block_factors(schema.Highpass(family="butterworth", order=2, corner_hz=given["f1_hz"])),
        block_factors(schema.Lowpass(family="butterworth", order=2, corner_hz=given["f2_hz"])),
    ]
    parts = [*band, constant(given["gain_linear"])]
    if "f4_hz" in given:
        top = [1 / given["f3_hz"], one] if "f3_hz" in given else [one]
        f4 = given["f4_hz"]
        bottom = [1 / f4**2, 1 / (given["q4"] * f4), one]
        parts.append(from_polynomials(polynomial(top), polynomial(bottom), HERTZ))
    if "f5_hz" in given:
        f5, f6 = given["f5_hz"], given["f6_hz"]
        top = [1 / f5**2, 1 / (given["q5"] * f5), one]
        bottom = [1 / f6**2, 1 / (given["q6"] * f6), one]
        parts += [from_polynomials(polynomial(top), polynomial(bottom), HERTZ), constant((f5 / f6) ** 2)]
    return build(product(parts))


@pytest.mark.parametrize("name", ["Wk", "Wd", "Wf"])
def test_levels_of_the_table(name: str) -> None:
    """ISO 2631-1:1997 Table 3 at the nominal frequencies, decibel column."""
    table = TABLES[name]
    levels = analog_db(weighting(name), table["nominal_frequency_hz"])
    assert levels == pytest.approx([float(x) for x in table["level_db"]], abs=0.00501)


@pytest.mark.parametrize("name", ["Wk", "Wd", "Wf"])
def test_factors_of_the_table(name: str) -> None:
    """ISO 2631-1:1997 Table 3, factor column, within one of its last digit; its 212 for Wd at 10 Hz is a
    misprint for 202."""
    table = TABLES[name]
    factors = 1000 * 10 ** (analog_db(weighting(name), table["nominal_frequency_hz"]) / 20)
    for frequency, found, printed in zip(
        table["nominal_frequency_hz"], factors, table["factor_times_1000"], strict=True
    ):
        if (name, frequency) == ("Wd", 10):
            assert float(printed) == 212
            assert round(found) == 202
            continue
        # three significant digits above 100, as many as are printed below
        places = 0 if printed >= 100 else -printed.as_tuple().exponent
        unit = 10.0**-places
        assert found == pytest.approx(float(printed), abs=0.75 * unit), frequency


@pytest.mark.parametrize("name", sorted(PARAMETERS))
def test_reference_factor(name: str) -> None:
    """ISO 8041 reference factors at 100 rad/s (Wh: 500 rad/s); those of Wk and Wm from memory."""
    table = DATA["reference_factor"]
    printed = table.get(f"{name}_linear", table.get(f"{name}_from_memory_linear"))
    if printed is None:
        assert name == "Wf"  # outside its band
        return
    frequency = table["wh_reference_frequency_hz" if name == "Wh" else "reference_frequency_hz"]
    factor = 10 ** (analog_db(weighting(name), [frequency])[0] / 20)
    assert factor == pytest.approx(float(printed), abs=0.5 * 10.0 ** printed.as_tuple().exponent)


def test_wm_transition_is_a_single_pole() -> None:
    """ISO 8041: f3 = f4 and Q4 = 0.5 reduce the transition of Wm to 1 / (1 + s/w4), exactly."""
    model = weighting("Wm")
    assert model.order == 5
    ((root, times),) = model.cancelled
    assert times == 1
    assert float(root.evaluate().real) == pytest.approx(-2 * np.pi * float(PARAMETERS["Wm"]["f4_hz"]), rel=1e-15)
    f1, f2, f4 = (exact(PARAMETERS["Wm"][f"f{k}_hz"]) for k in (1, 2, 4))
    simple = blocks(
        schema.Highpass(family="butterworth", order=2, corner_hz=f1),
        schema.Lowpass(family="butterworth", order=2, corner_hz=f2),
        schema.Lag(corner_hz=f4),
    )
    assert (model.poles, model.zeros) == (simple.poles, simple.zeros)
    assert model.gain.value().overlaps(simple.gain.value())


@pytest.mark.parametrize(
    ("method", "options"), [("bilinear", {}), ("matched", {"match_hz": 8})], ids=["bilinear", "matched"]
)
@pytest.mark.parametrize("name", ["Wk", "Wd"])
def test_digital_weighting_near_the_table(name: str, method: str, options: dict[str, int]) -> None:
    """ISO 2631-1:1997 Table 3 up to 80 Hz by a filter at 4 kHz: within 0.04 dB of the printed level."""
    table = TABLES[name]
    chosen = [i for i, f in enumerate(table["nominal_frequency_hz"]) if f <= 80]
    levels = digital_db(
        sampled(weighting(name), 4000, method, **options), [table["nominal_frequency_hz"][i] for i in chosen]
    )
    assert levels == pytest.approx([float(table["level_db"][i]) for i in chosen], abs=0.04)


def test_motion_sickness_weighting_at_a_high_rate() -> None:
    """ISO 2631-1:1997 Table 3, Wf up to 1 Hz, sampled at 200 Hz: poles 0.003 from z = 1."""
    table = TABLES["Wf"]
    chosen = [i for i, f in enumerate(table["nominal_frequency_hz"]) if f <= 1]
    levels = digital_db(sampled(weighting("Wf"), 200, "bilinear"), [table["nominal_frequency_hz"][i] for i in chosen])
    assert levels == pytest.approx([float(table["level_db"][i]) for i in chosen], abs=0.012)
