"""The arrangement of the sections in the report, and that all commands ship the same one."""

import re

import pytest

from cli.shared import LAG, design_text, json_of, run, write

BLOCK = """kind = "blocks"
[[model.block]]
type = "lowpass"
family = "elliptic"
order = 6
corner_hz = 50
ripple_db = 0.5
stop_db = 60"""
MORE = """[signals]
input = { unit = "V", full_scale = 1, peak = 0.5 }
output = { unit = "V", full_scale = 1 }
[arithmetic]
coefficient_bits = 24
"""


def six(*lines: str) -> str:
    return design_text(BLOCK, "bilinear", 1000, MORE + "\n".join(lines))


def test_the_report_says_what_was_gained(tmp_path):
    path = write(tmp_path, six())
    data = json_of(run("check", "--json", path))
    gained = data["fixed"]["arrangement"]
    assert gained["noise_rms_estimate"] < 0.95 * gained["noise_rms_estimate_by_rule"]
    # two estimates of one thing: in double precision before the integers, from their exact responses after
    assert gained["noise_rms_estimate"] == pytest.approx(data["bounds"]["noise_rms_estimate"], rel=0.01)
    line = next(line for line in run("check", path).stdout.splitlines() if line.startswith("  sections"))
    figures = [float(text) for text in re.findall(r"[\d.]+(?= counts|(?= \(est))", line)]
    assert figures == pytest.approx([gained["noise_rms_estimate"], gained["noise_rms_estimate_by_rule"]], rel=0.01)


def test_the_sections_shown_are_those_that_ship(tmp_path):
    data = json_of(run("check", "--json", write(tmp_path, six())))
    for exact, stored in zip(data["sampling"]["sections"], data["fixed"]["sections"], strict=True):
        a = [value / 2 ** stored["a_fraction_bits"] for value in stored["a"]]
        assert a == pytest.approx(exact["a"], rel=1e-3)
        assert [b / stored["b"][0] for b in stored["b"]] == pytest.approx(
            [b / exact["b"][0] for b in exact["b"]], rel=1e-3
        )


def test_nothing_is_said_where_nothing_was_changed(tmp_path):
    for text in (LAG, six('structure = "delta"'), six('scaling = "none"')):
        path = write(tmp_path, text)
        assert json_of(run("check", "--json", path))["fixed"]["arrangement"] is None
        assert "  sections" not in run("check", path).stdout


def test_a_program_that_only_the_rule_s_order_has_is_shipped(tmp_path, monkeypatch):
    """Where the new arrangement is refused, that of the rule is taken."""
    from afterkick import verdict
    from afterkick.errors import Problem, Refused

    plain = json_of(run("check", "--json", write(tmp_path, six())))
    assert plain["fixed"]["arrangement"] is not None
    real = verdict.candidates

    def choosy(sampled, *rest, **named):
        if sampled.arrangement is not None:
            raise Refused(Problem("arithmetic", "too narrow", "wider", "widen"))
        return real(sampled, *rest, **named)

    monkeypatch.setattr(verdict, "candidates", choosy)
    data = json_of(run("check", "--json", write(tmp_path, six())))
    assert data["fixed"]["arrangement"] is None
    assert data["fixed"]["sections"] != plain["fixed"]["sections"]
