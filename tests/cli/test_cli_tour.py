"""``afterkick tour`` and ``afterkick targets``, with and without a compiler."""

import importlib.util
from pathlib import Path

import pytest

from afterkick.starters import STARTERS
from cli.shared import json_of, lag_with, refused, run, write

TARGETS = Path(__file__).parents[2] / "targets"


@pytest.fixture
def _no_compiler(monkeypatch):
    """An empty path, no CC, no wheel with a compiler."""
    find = importlib.util.find_spec
    monkeypatch.setenv("PATH", "")
    monkeypatch.delenv("CC", raising=False)
    monkeypatch.setattr(
        "importlib.util.find_spec", lambda name, *rest: None if name == "ziglang" else find(name, *rest)
    )


def test_tour_walks_all_starters():
    result = run("tour")
    assert result.exit_code == 0
    assert result.stdout.count("4096 samples equal integer for integer") == len(STARTERS)
    assert "verify it on the real hardware" in result.stdout
    count = len(STARTERS)
    assert [line.split()[0] for line in result.stderr.splitlines()] == [f"[{k}/{count}]" for k in range(1, count + 1)]
    assert all(len(line) <= 120 for line in result.stdout.splitlines())


def test_tour_as_json():
    result = run("tour", "--json")
    assert result.exit_code == 0
    stops = json_of(result)["stops"]
    assert [stop["design"] for stop in stops] == list(STARTERS)
    assert all(stop["equal"] is True and stop["compiler"] and stop["verdict"] == "holds" for stop in stops)


@pytest.mark.usefixtures("_no_compiler")
def test_without_a_compiler_the_rest_is_shown_and_the_exit_code_is_3():
    result = run("tour")
    assert result.exit_code == 3
    assert result.stdout.count("not compiled") == len(STARTERS)
    assert "no C compiler" in result.stderr
    as_json = run("tour", "--json")
    assert as_json.exit_code == 3
    assert all(stop["equal"] is None and "no C compiler" in stop["lacking"] for stop in json_of(as_json)["stops"])


@pytest.mark.usefixtures("_no_compiler")
def test_other_commands_need_no_compiler(tmp_path):
    path = write(tmp_path, lag_with(""))
    assert run("check", path).exit_code == 0
    assert run("kick", path).exit_code == 0
    assert run("emit", path, "-o", str(tmp_path / "out")).exit_code == 0


def test_a_compiler_that_is_not_there(monkeypatch):
    monkeypatch.setenv("CC", "/nowhere/cc -O2")
    result = run("tour", "--json")
    assert result.exit_code == 3
    assert "CC names /nowhere/cc" in result.stderr


def test_targets_are_listed():
    profiles = sorted(path.stem for path in TARGETS.glob("*.toml"))
    shown = run("targets")
    assert shown.exit_code == 0
    assert all(f"\n{name} " in shown.stdout for name in profiles)
    assert all(len(line) <= 120 for line in shown.stdout.splitlines())
    listed = json_of(run("targets", "--json"))["targets"]
    assert [profile["name"] for profile in listed] == profiles
    assert all({"title", "core", "word_bits", "compiler"} <= profile.keys() for profile in listed)


def test_own_targets(tmp_path):
    text = (TARGETS / "host.toml").read_text(encoding="utf-8")
    (tmp_path / "mine.toml").write_text(text, encoding="utf-8")
    assert "\nmine " in run("targets", "--targets", str(tmp_path)).stdout
    (tmp_path / "wrong.toml").write_text(text.replace("word_bits", "word_bit"), encoding="utf-8")
    message = run("targets", "--targets", str(tmp_path))
    assert message.exit_code == 2
    assert "did you mean word_bits?" in message.stderr
    assert message.stdout == ""
    (tmp_path / "wrong.toml").write_bytes(b"\xff\xfe")
    assert run("targets", "--targets", str(tmp_path)).exit_code == 2
    refused(run("targets", "--targets", str(tmp_path / "absent")))


def test_a_lost_installation_is_lacking(monkeypatch, tmp_path):
    monkeypatch.setattr("afterkick.resources.__file__", str(tmp_path / "a" / "b" / "c.py"))
    for arguments in (["targets"], ["new", "mine", "-o", str(tmp_path)], ["check", write(tmp_path, lag_with(""))]):
        result = run(*arguments)
        assert result.exit_code == 3
        assert "install the package again" in result.stderr
