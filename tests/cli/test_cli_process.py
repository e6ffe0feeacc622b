"""The program as a process of its own: streams, pipes, encodings, and what it imports."""

import json
import os
import subprocess
import sys
from pathlib import Path

import pytest

from afterkick import __version__
from cli.shared import LAG, run, write

COMMANDS = ("new", "check", "kick", "emit", "targets", "tour")
SOURCE = str(Path(__file__).parents[2] / "src")


def process(*arguments: str, **environment: str) -> subprocess.CompletedProcess[bytes]:
    paths = os.pathsep.join([SOURCE, os.environ.get("PYTHONPATH", "")])
    return subprocess.run(
        [sys.executable, "-m", "afterkick", *arguments],
        capture_output=True,
        env={**os.environ, "PYTHONPATH": paths, **environment},
        timeout=120,
    )


def test_as_a_module(tmp_path):
    found = process("check", write(tmp_path, LAG))
    assert found.returncode == 0
    assert found.stdout.startswith(b"probe: holds")
    assert found.stderr == b""
    assert process("--version").stdout.split()[-1].decode() == __version__


def test_exit_codes_reach_the_shell(tmp_path):
    assert process("check", write(tmp_path, LAG.replace("90", "0.001"))).returncode == 1
    assert process("check", str(tmp_path / "absent.toml")).returncode == 2
    assert process("tour", CC="/nowhere/cc").returncode == 3


@pytest.mark.parametrize("command", COMMANDS)
def test_help_of_each_command(command):
    result = run(command, "--help")
    assert result.exit_code == 0
    assert result.stdout.startswith(f"Usage: main {command} ") or f"afterkick {command}" in result.stdout
    assert run(command, "-h").stdout == result.stdout
    assert f"  {command} " in run("--help").stdout


@pytest.mark.parametrize(("typed", "meant"), [("chekc", "check"), ("emitt", "emit"), ("target", "targets")])
def test_an_unknown_command_suggests_the_nearest(typed, meant):
    result = run(typed)
    assert result.exit_code == 2
    assert f"Did you mean {meant}?" in result.stderr
    assert result.stdout == ""


def test_an_unknown_command_lists_all():
    result = run("xyzzy")
    assert result.exit_code == 2
    assert "Did you mean" not in result.stderr
    assert all(command in result.stderr for command in COMMANDS)


def test_unknown_options_and_missing_arguments():
    for arguments in (["check"], ["kick"], ["emit"], ["new"], ["check", "--jsn", "x"], ["--nonsense"]):
        result = run(*arguments)
        assert result.exit_code == 2
        assert result.stdout == ""
        assert "Error: " in result.stderr


@pytest.mark.skipif(os.name != "posix", reason="pipes as POSIX shells have them")
@pytest.mark.parametrize("arguments", [["check"] + ["{}"] * 20, ["kick", "{}", "--samples", "20000"]])
def test_a_reader_that_leaves_early(arguments, tmp_path):
    path = write(tmp_path, LAG)
    command = [sys.executable, "-m", "afterkick", *(path if word == "{}" else word for word in arguments)]
    environment = {**os.environ, "PYTHONPATH": SOURCE}
    with subprocess.Popen(command, stdout=subprocess.PIPE, stderr=subprocess.PIPE, env=environment) as running:
        assert running.stdout is not None
        assert running.stderr is not None
        assert running.stdout.readline().startswith(b"probe: ")
        running.stdout.close()
        assert running.stderr.read() == b""


def test_a_terminal_without_greek_letters(tmp_path):
    text = LAG.replace("numerator = [50]", "numerator = [1, 50.5]").replace('"probe"', '"probe"\ntitle = "Ω µ"')
    text += "[signals]\noutput = { full_scale = 4 }"
    path = write(tmp_path, text)
    for arguments in (["check", path], ["check", "--json", path], ["kick", path]):
        found = process(*arguments, PYTHONIOENCODING="cp1252")
        assert found.returncode == 0, found.stderr
        assert found.stderr == b""
    shown = process("check", path, PYTHONIOENCODING="cp1252").stdout.decode("cp1252")
    assert shown.startswith("probe (? µ): holds")
    assert "1 ?(t) " in shown
    assert "1 δ(t) " in process("check", path, PYTHONIOENCODING="utf-8").stdout.decode()
    assert json.loads(process("check", "--json", path, PYTHONIOENCODING="cp1252").stdout)["title"] == "Ω µ"


@pytest.mark.parametrize(
    ("arguments", "costly"),
    [
        # They cost more than the whole check; see tests/figures/start_time.py.
        (["check"], ["scipy", "control", "matplotlib", "jinja2", "rich", "numpy.ma", "importlib.metadata", "difflib"]),
        (["--help"], ["numpy", "flint", "attrs", "cattrs", "tomllib"]),
    ],
)
def test_what_is_not_imported(arguments, costly, tmp_path):
    path = [write(tmp_path, LAG)] if "check" in arguments else []
    code = f"""
import sys
from afterkick.cli import main
try:
    main({arguments + path!r})
except SystemExit as leaving:
    assert leaving.code == 0
print("imported:", *sorted(set({costly!r}) & sys.modules.keys()))
"""
    environment = {**os.environ, "PYTHONPATH": SOURCE}
    found = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, env=environment, check=True)
    assert found.stdout.splitlines()[-1] == "imported:"
