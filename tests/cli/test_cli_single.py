"""``kind = "float32"`` through every command, against scipy in doubles and against numpy's single precision."""

import re
from pathlib import Path

import numpy as np
import pytest
from scipy.signal import sosfilt

from afterkick.bench import run_on_host
from afterkick.design import read_design
from afterkick.starters import STARTERS, starter_text
from afterkick.verdict import assess
from cli.shared import design_text, json_of, lag_with, ratio, refused, run, write

SINGLE = '[arithmetic]\nkind = "float32"'
UNITS = '[signals]\ninput = { unit = "bar", peak = 12 }\noutput = { unit = "V", full_scale = 5 }\n'
LOWPASS = (
    'kind = "blocks"\n[[model.block]]\ntype = "lowpass"\nfamily = "chebyshev"\norder = 5\ncorner_hz = 40\n'
    'ripple_db = 1\n[[model.block]]\ntype = "dead-time"\ndelay_s = 0.003'
)
VALVE = design_text(LOWPASS, "bilinear", more=f"{UNITS}{SINGLE}\n[budget]\ndc_gain_ppm = 1\nimpulse_peak_percent = 20")
INTEGRATING = design_text(ratio([3, 60], [1, 20, 0]), more=f"{UNITS}{SINGLE}\n[budget]\ndc_gain_ppm = 50")


def in_single(starter: str) -> str:
    """The starter without the keys that only integers have."""
    kept = re.sub(r"^\w+_counts .*\n", "", starter_text(starter), flags=re.MULTILINE)
    return re.sub(r"^\[arithmetic\]\n.*?(?=^\[)", f"{SINGLE}\n", kept, flags=re.MULTILINE | re.DOTALL)


@pytest.mark.parametrize("starter", STARTERS)
def test_every_starter_in_single_precision(starter, tmp_path):
    path = write(tmp_path, in_single(starter))
    result = run("check", path)
    data = json_of(run("check", "--json", path))
    if data["model"]["dc_gain"] is None:  # it integrates: 24 bits of a numerator whose sum is small are not enough
        assert result.stdout.splitlines()[0].endswith("FALLS SHORT: dc_gain_ppm")
        assert 'remedy: kind = "fixed" with structure = "parallel"' in result.stdout
    else:
        assert result.exit_code == 0, result.stdout
        assert result.stdout.splitlines()[0].endswith("): holds")
    assert all(len(line) <= 120 for line in result.stdout.splitlines())
    assert "fixed" not in data
    assert "bounds" not in data
    assert data["float32"].keys() >= {"sections", "dc_gain", "errors", "bounds_without_rounding", "estimates"}
    for section in data["float32"]["sections"]:
        assert all(value == float(np.float32(value)) for value in [*section["b"], *section["a"]])


def test_report_of_a_filter(tmp_path):
    path = write(tmp_path, VALVE)
    result = run("check", path)
    assert result.exit_code == 0
    shown, data = result.stdout, json_of(run("check", "--json", path))["float32"]
    bounds, estimates = data["bounds_without_rounding"], data["estimates"]
    lines = {line[:12].strip(): line[12:] for line in shown.splitlines() if line[:12].strip()}
    assert lines["float32"].startswith("transposed direct form II; every product and every sum of two rounds to the")
    assert "with the singles" in lines["errors"]
    for name, words in (
        ("bounds", f"stays within {bounds['output_peak']:.4g} V for any input up to 12 bar, roundings left out"),
        ("output", f"off by at most {bounds['coefficient_error']:.4g} V"),
        ("noise", f"{estimates['noise']['rms']:.4g} V r.m.s. for a sine of 12 bar at "),
        ("tail", f"from {estimates['tail']['after_impulse']} samples after one sample of 12 bar"),
        ("cost", f"{estimates['cost']['instructions']} instructions"),
    ):
        assert words in lines[name]
    assert "counts" not in shown
    assert sum(len(section["coefficients"]) for section in data["sections"]) > 10


def test_the_shipped_filter_against_scipy_in_doubles(tmp_path):
    """What the compiled C does with noise, a step and an alternation of the promised peak, against sosfilt.

    With the stored coefficients: within the estimated rounding noise; with the exact ones: within their bound.
    """
    data = json_of(run("check", "--json", write(tmp_path, VALVE)))
    assert run("emit", write(tmp_path, VALVE), "-o", str(tmp_path / "out")).exit_code == 0
    files = {path.name: path.read_text(encoding="ascii") for path in (tmp_path / "out").iterdir()}
    noise = np.random.default_rng(5).uniform(-12, 12, 4000)
    inputs = np.concatenate([noise, np.full(500, 12.0), 12.0 * (-1.0) ** np.arange(500)]).astype(np.float32)
    found = run_on_host(files, assess(read_design(VALVE)).realisation.program, inputs)
    assert found.selftest == -1
    assert data["sampling"]["delay"] == 3
    late = np.concatenate([np.zeros(3), inputs])[: inputs.size]

    def filtered(sections):
        return sosfilt([[*section["b"], *section["a"]] for section in sections], late)

    expected = data["float32"]["estimates"]["noise"]["rms"]
    rms = float(np.sqrt(np.mean((found.outputs - filtered(data["float32"]["sections"])) ** 2)))
    assert expected / 100 < rms < 1.5 * expected
    most = data["float32"]["bounds_without_rounding"]
    worst = np.abs(found.outputs - filtered(data["sampling"]["sections"])).max()
    assert worst <= most["coefficient_error"] + 8 * expected
    assert 0.3 * most["output_peak"] < np.abs(found.outputs).max() <= most["output_peak"] + 8 * expected


@pytest.mark.parametrize("text", [VALVE, INTEGRATING], ids=["low-pass", "integrator"])
def test_kick_against_single_precision_of_numpy(text, tmp_path):
    """Transposed direct form II written out, with the coefficients that check prints."""
    path = write(tmp_path, text)
    sections = json_of(run("check", "--json", path))["float32"]["sections"]
    data = json_of(run("kick", "--json", "--samples", "200", "--amplitude", "7.3", path))
    assert data["amplitude"] == float(np.float32(7.3))
    delay = json_of(run("check", "--json", path))["sampling"]["delay"]
    signal = np.zeros(200, np.float32)
    signal[delay] = 7.3
    for section in sections:
        b0, b1, b2 = (np.float32(value) for value in section["b"])
        _, a1, a2 = (np.float32(value) for value in section["a"])
        s1 = s2 = np.float32(0)
        answer = []
        for x in signal:
            y = b0 * x + s1
            s1 = (s2 - a1 * y) + b1 * x
            s2 = b2 * x - a2 * y
            answer.append(y)
        signal = np.array(answer)
    assert [row["output"] for row in data["rows"]] == [float(value) for value in signal]
    scaled = signal.astype(np.float64) / float(np.float32(7.3)) * 1000
    assert [row["float32"] for row in data["rows"]] == pytest.approx(scaled.tolist(), rel=1e-12)
    sampled = np.array([row["sampled"] for row in data["rows"]])
    assert np.abs(scaled - sampled).max() < 1e-4 * np.abs(sampled).max()


def test_kick_as_a_table(tmp_path):
    lines = run("kick", "--samples", "5", write(tmp_path, VALVE)).stdout.splitlines()
    assert lines[0] == "probe: impulse response in V/(bar s); bilinear at 1000 Hz; the singles were kicked with 12 bar"
    assert lines[1].split()[-3:] == ["float32", "output", "[V]"]
    assert {len(line) for line in lines[1:]} == {len(lines[1])}
    rows = json_of(run("kick", "--json", "--samples", "5", write(tmp_path, VALVE)))["rows"]
    assert [float(np.float32(float(line.split()[-1]))) for line in lines[2:]] == [row["output"] for row in rows]


@pytest.mark.parametrize("amplitude", ["1e39", "1e-39"])
def test_an_amplitude_that_is_no_normal_single_is_refused(amplitude, tmp_path):
    assert "--amplitude" in refused(run("kick", "--amplitude", amplitude, write(tmp_path, VALVE)))


def test_a_filter_that_integrates_is_shown_without_bounds(tmp_path):
    path = write(tmp_path, INTEGRATING)
    result = run("check", path)
    assert "nothing is bounded: the response does not decay" in result.stdout
    data = json_of(run("check", "--json", path))
    assert data["float32"]["dc_gain"] is None
    assert data["float32"]["bounds_without_rounding"]["output_peak"] is None
    assert data["float32"]["estimates"]["noise"] is None
    assert data["budget"][0]["remark"] == "of the growth: the model integrates"


def test_budget_of_the_coefficients(tmp_path):
    """At 400 times the corner singles move the poles visibly: the limits are those of the stored coefficients."""
    model = 'kind = "blocks"\n[[model.block]]\ntype = "lowpass"\nfamily = "bessel"\norder = 4\ncorner_hz = 10'
    limits = "[budget]\nimpulse_peak_percent = {}\nmagnitude_db = 0.1\nphase_deg = 1\nband_hz = 20\ndc_gain_ppm = 1"
    text = design_text(model, "impulse-invariant", 4000, f"{SINGLE}\n{limits}")
    data = json_of(run("check", "--json", write(tmp_path, text.format(1))))
    assert data["verdict"] == "holds"
    exact, shipped = data["errors"]["impulse"]["peak"], data["float32"]["errors"]["impulse"]["peak"]
    assert exact < 1e-9 < 1e-5 < shipped
    found = {line["item"]: line["found"] for line in data["budget"]}
    assert found["impulse_peak_percent"] == 100 * shipped
    # between the two: exact coefficients would hold, singles don't
    short = run("check", write(tmp_path, text.format(50 * shipped)))
    assert short.exit_code == 1
    assert short.stdout.splitlines()[0].endswith("FALLS SHORT: impulse_peak_percent")


def test_emitted_files(tmp_path):
    path = write(tmp_path, VALVE)
    result = run("emit", path, "-o", str(tmp_path / "out"))
    assert result.exit_code == 0
    assert "verdict of the budget: holds" in result.stderr
    files = {file.name: file.read_bytes() for file in Path(tmp_path / "out").iterdir()}
    assert sorted(files) == ["probe.c", "probe.h", "probe_selftest.c", "probe_selftest.h"]
    header = re.sub(r"[\s*]+", " ", files["probe.h"].decode("ascii"))
    data = json_of(run("check", "--json", path))
    for words in (
        f"design {data['digest']}",
        "Input: in bar, promised to stay within 12 bar. Output: in V.",
        "Delay in front of the sections: 3 samples.",
        "rounding of results left out (estimates)",
        "V r.m.s. to a sine of the promised peak at",
        "Budget of the design file: holds.",
    ):
        assert words in header
    assert run("emit", path, "-o", str(tmp_path / "again")).exit_code == 0
    assert {file.name: file.read_bytes() for file in Path(tmp_path / "again").iterdir()} == files


def test_own_templates_of_singles(tmp_path):
    own = tmp_path / "templates"
    (own / "c").mkdir(parents=True)
    (own / "c" / "header.h.j2").write_text("/* of integers */\n")
    (own / "c" / "float_header.h.j2").write_text("/* of singles */\n")
    for text, words in ((VALVE, "/* of singles */\n"), (lag_with(""), "/* of integers */\n")):
        assert run("emit", write(tmp_path, text), "-o", str(tmp_path / "out"), "--templates", str(own)).exit_code == 0
        assert (tmp_path / "out" / "probe.h").read_text() == words


def test_what_overflows_is_shown_and_not_emitted(tmp_path):
    signals = "[signals]\ninput = { peak = 1e38 }\n"
    path = write(tmp_path, design_text(ratio([5000], [1, 50]), more=signals + SINGLE))
    shown = run("check", path)
    assert shown.exit_code == 0
    assert "goes beyond the largest single" in shown.stdout
    assert json_of(run("check", "--json", path))["float32"]["estimates"]["overflows"] is True
    assert "beyond the largest single" in refused(run("emit", path, "-o", str(tmp_path / "out")))
    assert not (tmp_path / "out").exists()


def test_flushed_states(tmp_path):
    plain, flushed = lag_with(SINGLE), lag_with(f"{SINGLE}\nflush_below = 1e-30")
    shown = " ".join(run("check", write(tmp_path, flushed)).stdout.split())
    assert "states below 1e-30 become 0, which adds at most " in shown
    assert "if none were flushed" in shown
    kicked = [run("kick", "--json", "--samples", "2500", write(tmp_path, text)) for text in (plain, flushed)]
    last = [json_of(result)["rows"][-1]["output"] for result in kicked]
    assert 0 < last[0] < 2**-126
    assert last[1] == 0
    run("emit", write(tmp_path, flushed), "-o", str(tmp_path / "out"))
    assert "1e-30f" in (tmp_path / "out" / "probe.c").read_text()
    assert "arithmetic.flush_below" in refused(run("check", write(tmp_path, lag_with(f"{SINGLE}\nflush_below = 2"))))
