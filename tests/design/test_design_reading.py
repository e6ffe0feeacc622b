"""Good design files: every form, every block type, every default, exact numbers, the digest."""

from pathlib import Path

import attrs
import pytest
from flint import fmpq
from hypothesis import given
from hypothesis import strategies as st

from afterkick.design import canonical_text, digest, read_design, schema

GOOD = {path.stem: path.read_text("utf-8") for path in sorted((Path(__file__).parent / "good").glob("*.toml"))}

LAG = """
[design]
name = "skiff"
[model]
kind = "ratio"
numerator = [{numerator}]
denominator = [1, 1]
[sampling]
{sampling}
method = "zero-order-hold"
{rest}
"""


def lag(numerator: str = "1", sampling: str = "rate_hz = 100", rest: str = "") -> str:
    return LAG.format(numerator=numerator, sampling=sampling, rest=rest)


def test_every_key_of_a_full_file_is_read() -> None:
    design = read_design(GOOD["ode_everything"])
    assert design == schema.Design(
        design=schema.Identity("slam", 'Hull-slam accelerometer, "raw" {{ 10 °C }} */ // ??/ é'),
        model=schema.OdeForm((fmpq(1), fmpq(380), fmpq(250000)), (fmpq(250000),), (fmpq(1, 2), fmpq(0))),
        sampling=schema.Sampling(fmpq(10000), "bilinear", match_hz=fmpq(80)),
        signals=schema.Signals(
            input=schema.Signal("m/s²", fmpq(16), fmpq(12)), output=schema.Signal("m/s²", fmpq(16), None)
        ),
        arithmetic=schema.Arithmetic(
            coefficient_bits=24, rounding="even", overflow="wrap", accumulator_bits=64, scaling="two-norm"
        ),
        target=schema.Target("armv7e-m"),
        budget=schema.Budget(
            impulse_peak_percent=fmpq(1),
            impulse_rms_percent=fmpq(1, 2),
            magnitude_db=fmpq(1, 10),
            phase_deg=fmpq(2),
            band_hz=fmpq(1000),
            worst_case_counts=fmpq(8),
            noise_counts=fmpq(1),
            dead_band_counts=fmpq(0),
            dc_gain_ppm=fmpq(50),
            instructions=fmpq(60),
        ),
    )


def test_defaults_of_a_short_file() -> None:
    design = read_design(lag())
    assert design.design.title == "skiff"
    assert design.signals.input == schema.Signal(unit="", full_scale=fmpq(1), peak=None)
    assert design.signals.output == design.signals.input
    assert design.arithmetic == schema.Arithmetic()
    assert (design.arithmetic.data_bits, design.arithmetic.coefficient_bits) == (16, 16)
    assert (design.arithmetic.rounding, design.arithmetic.overflow) == ("nearest", "saturate")
    assert design.target.name == "host"
    assert all(limit is None for limit in attrs.astuple(design.budget))


def test_ode_before_is_filled_up_with_zeros() -> None:
    text = GOOD["ode_everything"].replace("before = [0.5]", "")
    model = read_design(text).model
    assert isinstance(model, schema.OdeForm)
    assert model.before == (0, 0)


def test_ratio_and_period() -> None:
    design = read_design(GOOD["ratio"])
    assert design.model == schema.RatioForm((fmpq(1, 10), fmpq(2)), (fmpq(1), fmpq(3, 10), fmpq(2)))
    assert design.sampling.rate_hz == fmpq(1000, 3)


def test_roots() -> None:
    design = read_design(GOOD["roots"])
    assert design.model == schema.RootsForm(
        poles=((fmpq(-3), fmpq(40)), (fmpq(-25, 2), fmpq(0))),
        zeros=((fmpq(0), fmpq(50)),),
        gain=fmpq(-3, 2),
        unit="Hz",
    )
    assert design.sampling == schema.Sampling(fmpq(400), "matched", match_hz=fmpq(10), zeros_at_infinity="delay")


def test_roots_defaults() -> None:
    text = lag().replace('"ratio"', '"roots"').replace("numerator = [1]", "").replace("denominator", "poles")
    model = read_design(text.replace("[1, 1]", "[[-1, 0]]")).model
    assert model == schema.RootsForm(poles=((fmpq(-1), fmpq(0)),), zeros=(), gain=fmpq(1), unit="rad/s")


def test_matrices() -> None:
    assert read_design(GOOD["matrices"]).model == schema.MatricesForm(
        a=((fmpq(0), fmpq(1)), (fmpq(-4), fmpq(-4, 5))), b=(fmpq(0), fmpq(1)), c=(fmpq(4), fmpq(0)), d=fmpq(1, 4)
    )


def test_families() -> None:
    design = read_design(GOOD["families"])
    assert isinstance(design.model, schema.BlocksForm)
    assert design.model.block == (
        schema.Lowpass("butterworth", 4, fmpq(900)),
        schema.Highpass("bessel", 3, fmpq(5, 2)),
        schema.Bandpass("chebyshev", 2, fmpq(100), fmpq(300), ripple_db=fmpq(1, 2)),
        schema.Bandstop("elliptic", 1, fmpq(49), fmpq(51), ripple_db=fmpq(1, 10), stop_db=fmpq(40)),
        schema.Lowpass("inverse-chebyshev", 1, fmpq(3000), stop_db=fmpq(60)),
    )
    assert design.sampling.first_sample == "full"


def test_other_blocks() -> None:
    model = read_design(GOOD["parts"]).model
    assert isinstance(model, schema.BlocksForm)
    assert model.block == (
        schema.Gain(fmpq(-2)),
        schema.Integrator(fmpq(1)),
        schema.Lag(time_constant_s=fmpq(1, 50)),
        schema.Lag(corner_hz=fmpq(7)),
        schema.LeadLag(fmpq(1), fmpq(10), fmpq(3)),
        schema.SecondOrder(fmpq(12), fmpq(7, 10)),
        schema.Notch(fmpq(50), fmpq(5), fmpq(30)),
        schema.Notch(fmpq(100), fmpq(5), None),
        schema.Resonator(fmpq(30), fmpq(2), fmpq(1)),
        schema.Pid(fmpq(1), fmpq(1, 2), fmpq(1, 100), fmpq(40)),
        schema.Ratio((fmpq(1),), (fmpq(1, 2), fmpq(1))),
        schema.RcLowpass(fmpq(10000), fmpq(1, 10**7)),
        schema.RcHighpass(fmpq(10**6), fmpq(1, 10**6)),
        schema.DeadTime(fmpq(3, 2000)),
    )


def test_the_good_files_hold_every_form_block_method_and_family() -> None:
    designs = [read_design(text) for text in GOOD.values()]
    blocks = [b for design in designs if isinstance(design.model, schema.BlocksForm) for b in design.model.block]
    assert {design.model.kind for design in designs} == set(schema.MODEL_FORMS)
    assert {block.type for block in blocks} == set(schema.BLOCK_TYPES)
    assert {design.sampling.method for design in designs} == set(schema.METHODS)
    assert {block.family for block in blocks if hasattr(block, "family")} == set(schema.FAMILIES)


def test_peak_or_full_scale() -> None:
    signals = read_design(GOOD["ode_everything"]).signals
    assert signals.input.peak_or_full_scale == 12
    assert signals.output.peak_or_full_scale == 16


def test_a_byte_order_mark_and_line_ends_do_not_matter() -> None:
    text = GOOD["matrices"]
    assert read_design("\ufeff" + text.replace("\n", "\r\n")) == read_design(text)


@pytest.mark.parametrize("name", ["a", "Slam2", "x" * 40, "integrator", "strain", "a_b", "t"])
def test_names(name: str) -> None:
    assert read_design(lag().replace("skiff", name)).design.name == name


@pytest.mark.parametrize("order", [1, 16])
def test_lowest_and_highest_order(order: int) -> None:
    text = lag().replace("denominator = [1, 1]", f"denominator = {[1] * (order + 1)}")
    model = read_design(text).model
    assert isinstance(model, schema.RatioForm)
    assert len(model.denominator) == order + 1


@given(st.integers(1, 10**60), st.integers(-200, 200))
def test_decimals_are_exact(digits: int, exponent: int) -> None:
    model = read_design(lag(numerator=f"{digits}.0e{exponent}")).model
    assert isinstance(model, schema.RatioForm)
    assert model.numerator[0] == digits * fmpq(10) ** exponent


@given(st.integers(1, 10**30), st.integers(-20, 20))
def test_a_period_is_the_exact_reciprocal_of_the_rate(digits: int, exponent: int) -> None:
    design = read_design(lag(sampling=f"period_s = {digits}.0e{exponent}"))
    assert design.sampling.rate_hz * digits * fmpq(10) ** exponent == 1


def test_digest_sees_values_only() -> None:
    text = GOOD["ode_everything"]
    spelt_otherwise = (
        text.replace("380.0", "3.80e2").replace("rate_hz  = 10000", "period_s = 0.0001").replace("carry = false", "")
        + "# a comment\n"
    )
    assert canonical_text(read_design(spelt_otherwise)) == canonical_text(read_design(text))
    assert digest(read_design(spelt_otherwise)) == digest(read_design(text))


def test_digest_sees_every_value() -> None:
    text = GOOD["ode_everything"]
    changes = [
        ('"slam"', '"slim"'),
        ("é", "e"),
        ("380.0", "380.0000000000000000000000001"),
        ("match_hz = 80.0", ""),
        ("peak = 12.0", "peak = 12.5"),
        ("data_bits = 16", "data_bits = 17"),
        ("armv7e-m", "host"),
        ("instructions = 60", "instructions = 61"),
    ]
    digests = {digest(read_design(text.replace(old, new))) for old, new in [("", ""), *changes]}
    assert len(digests) == len(changes) + 1


def test_digest_tells_block_types_apart() -> None:
    low, high = (GOOD["parts"].replace('"rc-lowpass"', f'"rc-{side}"') for side in ("lowpass", "highpass"))
    assert digest(read_design(low)) != digest(read_design(high))


def test_digest_is_the_same_on_every_machine() -> None:
    """Recorded once; it must only change together with the rendering, which the changelog then says."""
    design = read_design(GOOD["matrices"])
    assert canonical_text(design).isascii()
    assert digest(design) == "407a9cbbac79cca9726d065f17784717fa9f03657733d604e636167569e4caf3"
