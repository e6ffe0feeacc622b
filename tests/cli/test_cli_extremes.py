"""Designs at the edge of what can be computed: one screen or a clear refusal, never NaN, never a traceback."""

import re

import pytest

from afterkick.design.schema import METHODS
from cli.shared import design_text, json_of, ratio, refused, run, write

WIDEST = 120


def block(kind: str, **values: object) -> str:
    lines = "\n".join(
        f'{key} = "{value}"' if isinstance(value, str) else f"{key} = {value}" for key, value in values.items()
    )
    return f'[[model.block]]\ntype = "{kind}"\n{lines}\n'


def blocks(*listed: str) -> str:
    return 'kind = "blocks"\n' + "".join(listed)


LAG_BLOCK = block("lag", corner_hz=10)
MODELS = {
    "integrator": ratio([1], [1, 0]),
    "double integrator": ratio([1], [1, 0, 0]),
    "triple integrator": ratio([1], [1, 0, 0, 0]),
    "undamped": ratio([10000], [1, 0, 10000]),
    "undamped twice": ratio([100000000], [1, 0, 20000, 0, 100000000]),
    "unstable": ratio([1], [1, -5]),
    "unstable and integrating": ratio([1], [1, -5, 0]),
    "improper": ratio([1, 1, 1], [1, 50]),
    "ideal pid": blocks(block("pid", kp=1, ki=2, kd=0.01)),
    "zeros on the band grid": 'kind = "roots"\nunit = "Hz"\nzeros = [[0, 100]]\npoles = [[-10, 100]]',
    "only zeros at 0 Hz": ratio([1, 0, 0], [1, 200, 10000]),
    "mode far above half the rate": ratio([400000000], [1, 10, 400000000]),
    "order 16": blocks(block("lowpass", family="elliptic", order=16, corner_hz=100, ripple_db=0.1, stop_db=80)),
    "sixteen equal poles": f'kind = "roots"\ngain = 1e32\npoles = {[[-100, 0]] * 16}',
    "time constants far apart": blocks(block("lag", corner_hz=1e-6), LAG_BLOCK),
    "all-pass": ratio([-1, 100], [1, 100]),
    "gain 1e-20": ratio([1e-18], [1, 100]),
    "gain 1e20": ratio([1e22], [1, 100]),
    "gain 1e-300": ratio([1e-300], [1, 100]),
    "gain 1e300": ratio([1e300], [1, 100]),
    "fast": ratio([1e300], [1, 1e300]),
    "slow": ratio([1e-300], [1, 1e-300]),
    "zero at half the rate": ratio([1, 0, 9869604.4], [1, 3000, 9869604.4]),
    "dead time of a month": blocks(LAG_BLOCK, block("dead-time", delay_s=2.6e6)),
    "dead time beyond all time": blocks(LAG_BLOCK, block("dead-time", delay_s=1e200)),
}


def shown_or_refused(text: str, tmp_path) -> str:
    """What check says, after what must hold of any report or refusal."""
    path = write(tmp_path, text)
    result = run("check", path)
    assert result.exit_code in (0, 1, 2)
    if result.exit_code == 2:
        assert "could not be certified" in result.stderr or refused(result)
        assert max(map(len, result.stderr.splitlines())) < 800
        return result.stderr
    assert result.stderr == ""
    for line in result.stdout.splitlines():
        assert len(line) <= WIDEST, line
        assert not re.search(r"\b(nan|inf)\b", line), line
    as_json = run("check", "--json", path)
    assert as_json.exit_code == result.exit_code
    json_of(as_json)
    return result.stdout


@pytest.mark.parametrize("method", METHODS)
@pytest.mark.parametrize("name", MODELS)
def test_one_screen_or_a_clear_refusal(name, method, tmp_path):
    shown_or_refused(design_text(MODELS[name], method), tmp_path)


@pytest.mark.parametrize("name", MODELS)
def test_one_screen_or_a_clear_refusal_in_single_precision(name, tmp_path):
    shown_or_refused(design_text(MODELS[name], "bilinear", more='[arithmetic]\nkind = "float32"'), tmp_path)


@pytest.mark.parametrize("rate_hz", ["1e-300", "1e-3", "1e9", "1e300"])
@pytest.mark.parametrize("method", METHODS)
def test_extreme_rates(rate_hz, method, tmp_path):
    shown_or_refused(design_text(MODELS["undamped"].replace("0,", "20,"), method, rate_hz), tmp_path)


@pytest.mark.parametrize(("input_scale", "output_scale"), [("1e-300", "1e300"), ("1e300", "1e-300")])
@pytest.mark.parametrize("scaling", ["peak-gain", "two-norm", "infinity", "none"])
def test_extreme_full_scales(input_scale, output_scale, scaling, tmp_path):
    signals = f"[signals]\ninput = {{ full_scale = {input_scale} }}\noutput = {{ full_scale = {output_scale} }}"
    model = blocks(block("integrator"), block("lowpass", family="butterworth", order=4, corner_hz=50))
    shown = shown_or_refused(design_text(model, more=f'{signals}\n[arithmetic]\nscaling = "{scaling}"'), tmp_path)
    assert "remedy: " in shown
    assert "full scale" in shown


@pytest.mark.parametrize(("top", "bottom"), [("1e-300", "1e300"), ("1e300", "1e-300")])
def test_full_scales_beyond_the_range_of_doubles(top, bottom, tmp_path):
    """A gain of 1e600 or 1e-600 between signals that fit it: figures in counts have no float, and say so."""
    signals = f"[signals]\ninput = {{ full_scale = {bottom} }}\noutput = {{ full_scale = {top} }}"
    text = design_text(ratio([top], [bottom, bottom]), more=f"{signals}\n[arithmetic]\ncoefficient_bits = 32")
    shown = shown_or_refused(text, tmp_path)
    assert shown.startswith("probe: holds")
    kicked = run("kick", write(tmp_path, text))
    assert kicked.exit_code == 0
    assert kicked.stderr == ""
    json_of(run("kick", "--json", write(tmp_path, text)))
    assert run("emit", write(tmp_path, text), "-o", str(tmp_path / "out")).exit_code == 0


@pytest.mark.parametrize("method", ["bilinear", "backward-difference"])
@pytest.mark.parametrize("name", ["improper", "ideal pid"])
def test_an_improper_model_has_no_impulse_figures(name, method, tmp_path):
    """Bilinear puts a pole of the ideal derivative at z = -1: marginal, and said so."""
    text = design_text(MODELS[name], method, more="[budget]\nimpulse_peak_percent = 1")
    shown = shown_or_refused(text, tmp_path)
    data = json_of(run("check", "--json", write(tmp_path, text)))
    assert "improper" in shown
    assert data["errors"]["impulse"] is None
    assert data["errors"]["step"] is None
    assert data["model"]["feedthrough"] is None
    assert data["verdict"] == "unknown"
    assert data["budget"][0]["holds"] is None
    marginal = method == "bilinear" or name == "ideal pid"
    assert data["sampling"]["stability"] == ("marginal" if marginal else "stable")


@pytest.mark.parametrize("method", sorted({*METHODS} - {"bilinear", "backward-difference"}))
def test_an_improper_model_is_refused_by_the_other_methods(method, tmp_path):
    message = refused(run("check", write(tmp_path, design_text(MODELS["ideal pid"], method))))
    assert "bilinear or backward-difference" in message
    assert "derivative_corner_hz" in message


@pytest.mark.parametrize("method", METHODS)
def test_unstable_and_marginal_models_are_shown_as_such(method, tmp_path):
    for name, stability, code in (
        ("unstable", "unstable", 1),
        ("double integrator", "unstable", 1),
        ("integrator", "marginal", 0),
    ):
        path = write(tmp_path, design_text(MODELS[name], method))
        result = run("check", "--json", path)
        data = json_of(result)
        assert data["model"]["stability"] == stability
        assert data["errors"]["staircase_at_samples"] is None
        assert result.exit_code == code
        assert f"order {data['model']['order']}, {stability}" in run("check", path).stdout


def test_refused_rounding_names_the_section_and_remedies(tmp_path):
    message = refused(run("check", write(tmp_path, design_text(ratio([1], [1, 1]), rate_hz=1000000))))
    assert "arithmetic.coefficient_bits, section 1" in message
    assert "wider coefficients" in message


def test_a_filter_that_rounding_turns_into_a_wire_is_shown(tmp_path):
    """Integer zeros and poles that coincide cancel; here all of them do."""
    text = design_text(ratio([1, 0, 39478417.6], [1, 100, 39478417.6]))
    data = json_of(run("check", "--json", write(tmp_path, text)))
    section = data["fixed"]["sections"][0]
    assert section["b"] == section["a"]
    assert data["fixed"]["errors"]["step"]["peak"] < 1e-3


def test_delays_are_refused_in_few_words(tmp_path):
    for name, words in (("dead time of a month", "2600000000 whole samples"), ("dead time beyond all time", "10^12")):
        assert words in refused(run("check", write(tmp_path, design_text(MODELS[name]))))
