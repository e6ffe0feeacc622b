"""``afterkick kick``: its columns against closed forms of a first-order lag, in doubles of the standard library."""

from math import exp

import pytest

from cli.shared import design_text, json_of, lag_with, ratio, refused, run, write

GAIN, POLE, RATE = 0.9, 50.0, 1000.0
MODEL = ratio([45], [1, 50])
"""0.9 * 50 / (s + 50)."""
DEAD_TIME = '[[model.block]]\ntype = "dead-time"\ndelay_s = 0.003\n'
LAG_BLOCKS = f'kind = "blocks"\n[[model.block]]\ntype = "ratio"\nnumerator = [45]\ndenominator = [1, 50]\n{DEAD_TIME}'


def held(n: int) -> float:
    """h_d[n]/T of the step-invariant lag: its steps are those of 0.9 (1 - e^(-50 t))."""
    return 0.0 if n < 1 else GAIN * RATE * (exp(-POLE * (n - 1) / RATE) - exp(-POLE * n / RATE))


def analytic(n: int) -> float:
    """0.9 * 50 e^(-50 t), the mean of both sides at the jump."""
    return 0.0 if n < 0 else GAIN * POLE * exp(-POLE * n / RATE) * (0.5 if n == 0 else 1.0)


def kicked(path: str, *options: str) -> dict:
    result = run("kick", path, "--json", *options)
    assert result.exit_code == 0
    assert result.stderr == ""
    return json_of(result)


@pytest.mark.parametrize(("model", "late"), [(MODEL, 0), (LAG_BLOCKS, 3)])
def test_columns_of_a_lag(model, late, tmp_path):
    data = kicked(write(tmp_path, design_text(model)), "--samples", "60")
    assert [row["n"] for row in data["rows"]] == list(range(60))
    # The integers: one count is 1/32768; each sample rounds by half a count, which the pole e^(-0.05) adds up to ten.
    count = RATE / data["amplitude_counts"]
    assert data["amplitude_counts"] == 32767
    for row in data["rows"]:
        n = row["n"]
        assert row["t"] == pytest.approx(n / RATE, rel=1e-15)
        assert row["analytic"] == pytest.approx(analytic(n - late), rel=1e-12)
        assert row["sampled"] == pytest.approx(held(n - late), rel=1e-12)
        assert row["integer"] == pytest.approx(row["counts"] * count, rel=1e-14)
        assert abs(row["integer"] - row["sampled"]) <= 12 * count
    assert all(row["counts"] == 0 for row in data["rows"][: late + 1])
    # the DC gain of 9/10 is kept exactly: 1 + a1 gives way to it by up to 2.5 of its 1598 last places, so the peak does
    assert max(row["counts"] for row in data["rows"]) == pytest.approx(held(1) / RATE * 32767, abs=2.5)


@pytest.mark.parametrize(
    ("method", "first"),
    [
        ("impulse-invariant", GAIN * POLE / 2),
        ("bilinear", GAIN * POLE / (2 * RATE + POLE) * RATE),
        ("backward-difference", GAIN * POLE / (RATE + POLE) * RATE),
    ],
)
def test_first_sample_of_other_methods(method, first, tmp_path):
    """h_d[0]/T: half of h(0+); the value at 1/z = 0 of s = 2/T (1 - 1/z)/(1 + 1/z), and of s = (1 - 1/z)/T."""
    data = kicked(write(tmp_path, design_text(MODEL, method)))
    assert data["rows"][0]["sampled"] == pytest.approx(first, rel=1e-12)
    assert len(data["rows"]) == 32


def test_feedthrough_is_a_dirac_part_in_none_of_the_columns(tmp_path):
    """(s + 100)/(s + 50) = 1 + 50/(s + 50)."""
    path = write(tmp_path, design_text(ratio([1, 100], [1, 50]), more="[signals]\noutput = { full_scale = 4 }"))
    data = kicked(path)
    assert data["dirac"] == 1
    assert data["rows"][0]["sampled"] == pytest.approx(0.0, abs=1e-12)
    assert data["rows"][1]["sampled"] == pytest.approx(held(1) / GAIN, rel=1e-12)
    assert data["rows"][0]["analytic"] == pytest.approx(25, rel=1e-12)
    assert abs(data["rows"][0]["integer"]) < 0.2
    assert data["rows"][0]["counts"] == pytest.approx(8192, abs=1)
    assert "a Dirac part of weight 1 " in run("kick", path).stdout


def test_amplitude_is_in_input_units(tmp_path):
    path = write(tmp_path, lag_with("[signals]\ninput = { full_scale = 16, peak = 12 }\noutput = { full_scale = 16 }"))
    full, half = kicked(path), kicked(path, "--amplitude", "6.0")
    assert (full["amplitude_counts"], half["amplitude_counts"]) == (24576, 12288)
    assert half["rows"][1]["counts"] == pytest.approx(full["rows"][1]["counts"] / 2, abs=1)
    assert half["rows"][1]["sampled"] == full["rows"][1]["sampled"]


@pytest.mark.parametrize(
    "amplitude", ["0", "-1", "abc", "nan", "inf", "1e-9", "1.5", "1e400", "1e99999999999999999999", "", "\x1b[2J"]
)
def test_wrong_amplitudes(amplitude, tmp_path):
    message = refused(run("kick", write(tmp_path, lag_with("")), "--amplitude", amplitude))
    assert ": --amplitude: " in message
    assert message.strip().isprintable()


def test_the_range_of_amplitudes(tmp_path):
    path = write(tmp_path, lag_with(""))
    assert kicked(path, "--amplitude", "1")["amplitude_counts"] == 32767
    assert kicked(path, "--amplitude", "0.000030517578125")["amplitude_counts"] == 1


@pytest.mark.parametrize("samples", ["0", "-1", "100001", "x"])
def test_wrong_numbers_of_samples(samples, tmp_path):
    result = run("kick", write(tmp_path, lag_with("")), "--samples", samples)
    assert result.exit_code == 2
    assert "--samples" in result.stderr


def test_improper_models_and_clipping_are_named(tmp_path):
    text = 'kind = "blocks"\n[[model.block]]\ntype = "pid"\nkp = 1\nki = 2\nkd = 0.01'
    path = write(tmp_path, design_text(text, "backward-difference"))
    data = kicked(path)
    assert data["improper"] is True
    assert data["clipped"] > 0
    assert data["rows"][5]["analytic"] == pytest.approx(2.0)
    shown = run("kick", path).stdout
    assert "improper" in shown
    assert "smaller --amplitude" in shown


def test_table(tmp_path):
    result = run("kick", write(tmp_path, design_text(MODEL)), "--samples", "5")
    title, header, *rows = result.stdout.splitlines()
    assert (
        title
        == "probe: impulse response in 1/s; zero-order-hold at 1000 Hz; the integers were kicked with 32767 counts"
    )
    assert header.split()[:3] == ["n", "t", "[s]"]
    assert [int(row.split()[0]) for row in rows] == [0, 1, 2, 3, 4]
    assert {len(row) for row in [header, *rows]} == {len(header)}
