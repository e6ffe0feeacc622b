"""``afterkick check``: verdicts, exit codes, JSON, and every kind of file that is no design."""

import os
from pathlib import Path

import pytest

from afterkick.starters import STARTERS, starter_text
from cli.shared import LAG, design_text, json_of, lag_with, ratio, refused, run, write

SHORT = lag_with("[budget]\nimpulse_peak_percent = 0.001")
UNJUDGED = design_text(ratio([1], [1, 0]), more="[budget]\nworst_case_counts = 1")
"""An integrator in the direct structure has no bound."""


@pytest.mark.parametrize("starter", STARTERS)
def test_every_starter_holds(starter, tmp_path):
    result = run("check", write(tmp_path, starter_text(starter)))
    assert result.exit_code == 0
    assert result.stdout.startswith(f"{starter} (")
    assert result.stdout.splitlines()[0].endswith("): holds")
    assert result.stderr == ""


@pytest.mark.parametrize("starter", STARTERS)
def test_json_of_every_starter_has_the_promised_keys(starter, tmp_path):
    result = run("check", "--json", write(tmp_path, starter_text(starter)))
    data = json_of(result)
    assert data["design"] == starter
    assert data["verdict"] == "holds"
    assert data["model"].keys() >= {
        *("order", "poles", "zeros", "dc_gain", "feedthrough", "jumps", "before", "after", "impulse_response"),
    }
    assert data["sampling"].keys() >= {"rate_hz", "method", "delay", "sections", "parallel"}
    assert data["errors"]["impulse"].keys() >= {"peak", "rms", "area", "delay_samples", "peak_aligned"}
    assert data["errors"]["step"].keys() >= {"peak"}
    assert data["fixed"].keys() >= {"structure", "sections", "dc_gain"}
    assert "bounds" in data
    for section in data["sampling"]["sections"]:
        assert section["a"][0] == 1
        assert len(section["b"]) == len(section["a"]) == 3
    for section in data["fixed"]["sections"]:
        assert all(isinstance(value, int) for value in [*section["b"], *section["a"], section["b_fraction_bits"]])
    for line in data["budget"]:
        assert line.keys() >= {"item", "limit", "found", "holds"}
        assert line["holds"] is True
        assert line["found"] <= line["limit"]


def test_exit_code_and_headline_of_each_verdict(tmp_path):
    for text, code, words in (
        (LAG, 0, "probe: holds"),
        (lag_with(""), 0, "probe: holds, as no budget is given"),
        (SHORT, 1, "probe: FALLS SHORT: impulse_peak_percent"),
        (design_text(ratio([1], [1, -5])), 1, "probe: FALLS SHORT: the model is unstable"),
    ):
        result = run("check", write(tmp_path, text))
        assert (result.exit_code, result.stdout.splitlines()[0]) == (code, words)


def test_several_designs_and_the_highest_exit_code(tmp_path):
    good, short = write(tmp_path, LAG, "good.toml"), write(tmp_path, SHORT, "short.toml")
    wrong = write(tmp_path, "[design]\n", "wrong.toml")
    assert run("check", good, good).exit_code == 0
    both = run("check", "--json", good, short)
    assert both.exit_code == 1
    assert [design["verdict"] for design in json_of(both)["designs"]] == ["holds", "falls short"]
    mixed = run("check", wrong, good, short)
    assert mixed.exit_code == 2
    assert mixed.stdout.count("probe: ") == 2
    assert all(line.startswith(f"{wrong}: ") for line in mixed.stderr.splitlines())
    assert len(json_of(run("check", "--json", wrong, good, short))["designs"]) == 2


def test_all_problems_of_a_file_are_reported(tmp_path):
    text = LAG.replace("1000", "0").replace("90", "-1").replace("probe", "int")
    message = refused(run("check", "--json", write(tmp_path, text)))
    for key in ("design.name", "sampling.rate_hz", "budget.impulse_peak_percent"):
        assert f": {key}: " in message


@pytest.mark.parametrize(
    ("content", "words"),
    [
        (b"\x7fELF\x02\x01\x01\x00\x00\xff\xfe", "not UTF-8"),
        (b"\x00" * 100, "no valid TOML"),
        (b"", "design: missing"),
        (b"# only a comment", "design: missing"),
        (b"\xff\xfe[\x00d\x00", "not UTF-8"),
        (b"#" * (1 << 20) + b"##", "more than 1 MiB"),
        (b"a = 1\n" * 50_000, "characters"),
    ],
)
def test_files_that_are_no_design(content, words, tmp_path):
    path = tmp_path / "probe.toml"
    path.write_bytes(content)
    for command in ("check", "kick", "emit"):
        output = ["-o", str(tmp_path / "out")] if command == "emit" else []
        assert words in refused(run(command, str(path), *output))
    assert not (tmp_path / "out").exists()


def test_paths_that_are_no_file(tmp_path):
    assert "No such file" in refused(run("check", str(tmp_path / "absent.toml")))
    assert "directory" in refused(run("check", str(tmp_path)))
    assert "directory" in refused(run("check", write(tmp_path, LAG) + "/probe.toml"))


@pytest.mark.skipif(not os.path.exists("/dev/zero"), reason="a device of POSIX systems")
def test_a_device_that_never_ends_is_refused():
    assert "more than 1 MiB" in refused(run("check", "/dev/zero"))


@pytest.mark.skipif(not hasattr(os, "geteuid") or os.geteuid() == 0, reason="the administrator reads everything")
def test_an_unreadable_file_is_refused(tmp_path):
    path = write(tmp_path, LAG)
    Path(path).chmod(0)
    assert "ermission" in refused(run("check", path))


def test_byte_order_mark_and_line_ends_make_no_difference(tmp_path):
    plain = write(tmp_path, LAG, "plain.toml")
    windows = tmp_path / "windows.toml"
    windows.write_bytes(b"\xef\xbb\xbf" + LAG.replace("\n", "\r\n").encode())
    assert json_of(run("check", "--json", plain)) == json_of(run("check", "--json", str(windows)))


def test_an_unknown_target_is_refused_and_an_own_one_found(tmp_path):
    path = write(tmp_path, lag_with('[target]\nname = "armv7-m"'))
    message = refused(run("check", path))
    assert 'unknown target "armv7-m"' in message
    assert 'did you mean "armv7e-m"?' in message
    own = tmp_path / "own"
    own.mkdir()
    profile = (Path(__file__).parents[2] / "targets" / "host.toml").read_text(encoding="utf-8")
    (own / "armv7-m.toml").write_text(profile, encoding="utf-8")
    assert run("check", "--targets", str(own), path).exit_code == 0
    assert "is no folder" in refused(run("check", "--targets", str(tmp_path / "absent"), path))


def test_a_title_can_not_disturb_the_report(tmp_path):
    text = LAG.replace('name = "probe"', 'name = "probe"\ntitle = "*/ {{ x }} \\" Ω"')
    result = run("check", write(tmp_path, text))
    assert result.stdout.splitlines()[0] == 'probe (*/ {{ x }} " Ω): holds'
    assert json_of(run("check", "--json", write(tmp_path, text)))["title"] == '*/ {{ x }} " Ω'


def test_a_limit_that_is_not_judged_is_no_pass(tmp_path):
    result = run("check", "--json", write(tmp_path, UNJUDGED))
    (line,) = json_of(result)["budget"]
    assert line["holds"] is None
    assert line["judged_by"] == "check"
    assert result.exit_code == 1
    assert json_of(result)["verdict"] == "unknown"
