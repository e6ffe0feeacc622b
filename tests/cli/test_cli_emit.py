"""``afterkick emit``: all files or none, the same bytes every time, nothing on wrong input."""

import os
import tempfile
from pathlib import Path

import pytest

from afterkick.cli.common import write_all
from afterkick.errors import Refused
from afterkick.starters import STARTERS, starter_text
from cli.shared import LAG, design_text, json_of, lag_with, ratio, refused, run, write

NAMES = ["probe.c", "probe.h", "probe_selftest.c", "probe_selftest.h"]


def listed(folder: Path) -> list[str]:
    return sorted(path.name for path in folder.iterdir())


def contents(folder: Path) -> dict[str, bytes]:
    return {path.name: path.read_bytes() for path in folder.iterdir()}


def test_four_files_and_the_verdict(tmp_path):
    out = tmp_path / "deep" / "out"
    result = run("emit", write(tmp_path, LAG), "-o", str(out))
    assert result.exit_code == 0
    assert result.stdout == ""
    assert "verdict of the budget: holds" in result.stderr
    assert listed(out) == NAMES
    as_json = json_of(run("emit", write(tmp_path, LAG), "-o", str(out), "--json"))
    assert sorted(as_json["files"]) == NAMES
    assert as_json["design"] == "probe"
    assert as_json["verdict"] == "holds"


@pytest.mark.parametrize("starter", STARTERS)
def test_same_bytes_twice(starter, tmp_path):
    path = write(tmp_path, starter_text(starter))
    for folder in ("one", "two"):
        assert run("emit", path, "-o", str(tmp_path / folder)).exit_code == 0
    again = run("emit", path, "-o", str(tmp_path / "two"))
    assert again.exit_code == 0
    assert contents(tmp_path / "one") == contents(tmp_path / "two")
    for name, content in contents(tmp_path / "one").items():
        assert content.endswith(b"\n"), name
        assert b"\r" not in content, name
        assert str(tmp_path).encode() not in content, name


def test_a_design_that_falls_short_is_written_and_said_so(tmp_path):
    path = write(tmp_path, lag_with("[budget]\nimpulse_peak_percent = 0.001"))
    result = run("emit", path, "-o", str(tmp_path / "out"))
    assert result.exit_code == 0
    assert "falls short" in result.stderr


@pytest.mark.parametrize(
    "text",
    [
        LAG.replace("1000", "0"),
        LAG + "[arithmetic\n",
        lag_with('[target]\nname = "nowhere"'),
        design_text(ratio([1], [1, 1]), rate_hz=1000000),
        design_text(ratio([1, 0, 0], [1, 1])),
    ],
)
def test_nothing_is_written_on_wrong_input(text, tmp_path):
    refused(run("emit", write(tmp_path, text), "-o", str(tmp_path / "out")))
    assert not (tmp_path / "out").exists()


def test_a_file_in_the_place_of_the_folder(tmp_path):
    path = write(tmp_path, LAG)
    (tmp_path / "out").write_text("mine")
    for folder in ("out", "out/deeper"):
        refused(run("emit", path, "-o", str(tmp_path / folder)))
    assert (tmp_path / "out").read_text() == "mine"


def test_a_folder_in_the_place_of_a_file(tmp_path):
    out = tmp_path / "out"
    (out / "probe_selftest.c").mkdir(parents=True)
    (out / "probe.h").write_text("older")
    message = refused(run("emit", write(tmp_path, LAG), "-o", str(out)))
    assert "a folder is in the place of probe_selftest.c" in message
    assert listed(out) == ["probe.h", "probe_selftest.c"]
    assert (out / "probe.h").read_text() == "older"


@pytest.mark.skipif(not hasattr(os, "geteuid") or os.geteuid() == 0, reason="the administrator writes everywhere")
def test_a_read_only_folder(tmp_path):
    out = tmp_path / "out"
    out.mkdir()
    out.chmod(0o555)
    refused(run("emit", write(tmp_path, LAG), "-o", str(out)))
    out.chmod(0o755)
    assert listed(out) == []


@pytest.mark.parametrize("failing", ["mkstemp", "replace"])
def test_a_write_that_fails_leaves_nothing(failing, tmp_path, monkeypatch):
    """The disk is full at the third file; the first move is not allowed."""
    calls = []
    real = tempfile.mkstemp

    def third_fails(*arguments, **options):
        calls.append(1)
        if len(calls) == 3:
            raise OSError(28, "No space left on device")
        return real(*arguments, **options)

    def not_allowed(*arguments):
        raise PermissionError(13, "Permission denied")

    if failing == "mkstemp":
        monkeypatch.setattr("afterkick.cli.common.tempfile.mkstemp", third_fails)
    else:
        monkeypatch.setattr("afterkick.cli.common.os.replace", not_allowed)
    message = refused(run("emit", write(tmp_path, LAG), "-o", str(tmp_path / "a" / "b")))
    assert "No space left" in message or "Permission denied" in message
    assert not (tmp_path / "a").exists()


def test_write_all_replaces_and_keeps_what_is_not_its_own(tmp_path):
    (tmp_path / "x").write_text("old")
    (tmp_path / "other").write_text("other")
    write_all(tmp_path, {"x": "new\n", "y": "ω\n"})
    assert contents(tmp_path) == {"x": b"new\n", "y": "ω\n".encode(), "other": b"other"}
    with pytest.raises(Refused):
        write_all(tmp_path / "x", {"y": ""})


def test_own_templates(tmp_path):
    own = tmp_path / "templates"
    (own / "c").mkdir(parents=True)
    (own / "c" / "header.h.j2").write_text("/* {{ nothing }} */\n")
    path = write(tmp_path, LAG)
    assert "template" in refused(run("emit", path, "-o", str(tmp_path / "out"), "--templates", str(own)))
    assert not (tmp_path / "out").exists()
    (own / "c" / "header.h.j2").write_text("/* mine */\n")
    assert run("emit", path, "-o", str(tmp_path / "out"), "--templates", str(own)).exit_code == 0
    assert (tmp_path / "out" / "probe.h").read_text() == "/* mine */\n"
    assert "holds no folder c" in refused(run("emit", path, "-o", str(tmp_path / "out"), "--templates", str(tmp_path)))


def test_output_folder_is_asked_for(tmp_path):
    result = run("emit", write(tmp_path, LAG))
    assert result.exit_code == 2
    assert "--output" in result.stderr
