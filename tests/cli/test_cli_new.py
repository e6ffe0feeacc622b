"""``afterkick new``: every starter, no file overwritten, no name that C refuses."""

import pytest

from afterkick.starters import STARTERS
from cli.shared import json_of, refused, run


@pytest.mark.parametrize("starter", STARTERS)
def test_what_new_writes_holds(starter, tmp_path):
    result = run("new", "mine", "--starter", starter, "-o", str(tmp_path))
    assert result.exit_code == 0
    assert result.stdout == ""
    path = tmp_path / "mine.toml"
    assert f"afterkick check {path}" in result.stderr
    checked = run("check", "--json", str(path))
    assert checked.exit_code == 0
    assert json_of(checked)["design"] == "mine"
    assert "#" in path.read_text(encoding="utf-8")


def test_slam_in_the_present_folder_is_the_default(tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    assert run("new", "mine").exit_code == 0
    assert "Hull-slam" in (tmp_path / "mine.toml").read_text(encoding="utf-8")


def test_nothing_is_overwritten(tmp_path):
    path = tmp_path / "mine.toml"
    path.write_text("precious")
    assert "a file that exists" in refused(run("new", "mine", "-o", str(tmp_path)))
    assert path.read_text() == "precious"
    path.unlink()
    path.symlink_to(tmp_path / "absent")
    refused(run("new", "mine", "-o", str(tmp_path)))
    assert path.is_symlink()


@pytest.mark.parametrize(
    "name",
    [
        "int",
        "class",
        "9lives",
        "a-b",
        "../up",
        "a b",
        "",
        "con",
        "stdint",
        "_x",
        "a__b",
        "x" * 100,
        "é",
        "a\x1b[1m",
        "a.b",
    ],
)
def test_bad_names(name, tmp_path):
    message = refused(run("new", "-o", str(tmp_path), "--", name))
    assert message.startswith("new: NAME: ")
    assert message.strip().isprintable()
    assert list(tmp_path.iterdir()) == []


def test_unknown_starter(tmp_path):
    result = run("new", "mine", "--starter", "sail", "-o", str(tmp_path))
    assert result.exit_code == 2
    assert all(starter in result.stderr for starter in STARTERS)
    assert list(tmp_path.iterdir()) == []


def test_a_file_in_the_place_of_the_folder(tmp_path):
    (tmp_path / "out").write_text("mine")
    refused(run("new", "mine", "-o", str(tmp_path / "out")))
