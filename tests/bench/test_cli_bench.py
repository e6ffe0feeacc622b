"""``afterkick bench``: text, JSON, exit codes, the compiler of one's own, and what a machine may lack."""

import importlib.util
import shlex
import sys
from pathlib import Path

import pytest

from afterkick.starters import STARTERS, starter_text
from bench.shared import CORES
from cli.shared import json_of, lag_with, refused, run, write

TARGETS = Path(__file__).parents[2] / "targets"
FEW = ("--samples", "2000")


def bench_of(folder, more: str = "", *options: str):
    return run("bench", write(folder, lag_with(f'[target]\nname = "rv32imc"\n{more}')), *FEW, *options)


def wheel(core: str) -> str:
    """The wheel's compiler, as a user would name it."""
    return shlex.join([sys.executable, "-m", "ziglang", "cc", *core.split()])


@pytest.mark.parametrize("starter", STARTERS)
def test_every_starter_is_equal_on_its_target(starter, tmp_path):
    result = run("bench", write(tmp_path, starter_text(starter)), *FEW)
    if starter == "echo":  # it names plain-16, for which there is no emulator
        assert result.exit_code == 3
        result = run("bench", write(tmp_path, starter_text(starter)), *FEW, "--target", "armv6-m")
    assert result.exit_code == 0, result.output
    assert result.stdout.splitlines()[0].endswith(": equal")
    assert result.stderr == ""
    assert all(len(line) <= 120 for line in result.stdout.splitlines())


@pytest.mark.parametrize("core", CORES)
def test_json_has_the_promised_keys(core, tmp_path):
    result = bench_of(tmp_path, "", "--target", core, "--json")
    assert result.exit_code == 0
    data = json_of(result)
    assert data["target"] == core
    assert data["compiler"].startswith("ziglang cc -target ")
    assert data["equal"] is True
    assert data["samples"] >= 2000
    assert data["selftest"] == -1
    for call in ("step", "run"):
        spread = data["instructions"][call]
        assert 0 < spread["lowest"] <= spread["mean"] <= spread["highest"]
    assert data["bytes"].keys() == {"code", "constants", "state", "stack", "helpers"}
    assert data["budget"] is None
    assert data["first_difference"] is None
    assert data == json_of(bench_of(tmp_path, "", "--target", core, "--json"))


def test_a_hundred_thousand_samples_are_the_default(tmp_path):
    data = json_of(run("bench", write(tmp_path, lag_with('[target]\nname = "rv32imc"')), "--json"))
    assert data["samples"] >= 100_000
    assert data["equal"] is True


def test_the_budget_of_instructions_is_judged_here(tmp_path):
    most = json_of(bench_of(tmp_path, "", "--json"))["instructions"]["step"]["highest"]
    exact = bench_of(tmp_path, f"[budget]\ninstructions = {most}", "--json")
    assert exact.exit_code == 0
    assert json_of(exact)["budget"] == {
        "item": "instructions",
        "limit": most,
        "found": most,
        "holds": True,
        "remark": "the most in one call of step",
    }
    short = bench_of(tmp_path, f"[budget]\ninstructions = {most - 1}")
    assert short.exit_code == 1
    assert "equal, but instructions fall short" in short.stdout.splitlines()[0]
    assert "FALLS SHORT" in short.stdout.splitlines()[-1]


def test_check_leaves_the_instructions_to_bench(tmp_path):
    path = write(tmp_path, lag_with("[budget]\nimpulse_peak_percent = 90\ninstructions = 1"))
    result = run("check", path)
    assert result.exit_code == 0
    assert result.stdout.splitlines()[0] == "probe: holds; instructions: see bench"
    assert "see bench" in result.stdout.splitlines()[-1]
    line = json_of(run("check", "--json", path))["budget"][-1]
    assert line["item"] == "instructions"
    assert line["holds"] is None
    assert line["judged_by"] == "bench"
    assert json_of(run("check", "--json", path))["verdict"] == "holds"
    alone = write(tmp_path, lag_with("[budget]\ninstructions = 1"), "alone.toml")
    assert run("check", alone).stdout.splitlines()[0] == "probe: holds, as no budget is given; instructions: see bench"


def test_on_this_machine_nothing_is_counted(tmp_path):
    result = bench_of(tmp_path, "[budget]\ninstructions = 60", "--target", "host")
    assert result.exit_code == 1
    assert "probe on host: equal" in result.stdout
    assert "not judged (nothing is counted on host)" in result.stdout


def test_without_an_emulator_it_is_compiled_and_the_exit_code_is_3(tmp_path):
    result = bench_of(tmp_path, "", "--target", "plain-16", "--json")
    assert result.exit_code == 3
    data = json_of(result)
    assert data["equal"] is None
    assert data["instructions"] is None
    assert data["bytes"]["code"] > 0
    assert data["bytes"]["stack"] is None
    assert "no emulator for plain-16" in data["lacking"]
    assert "no emulator for plain-16" in result.stderr


def test_a_compiler_of_ones_own(tmp_path):
    own = wheel("-target riscv32-freestanding-none -mcpu=generic_rv32+m+c -Os -fno-sanitize=all -O2")
    result = bench_of(tmp_path, "", "--cc", own, "--json")
    assert result.exit_code == 0, result.output
    assert json_of(result)["compiler"].startswith("ziglang cc -target riscv32-freestanding-none")
    here = bench_of(tmp_path, "", "--target", "host", "--cc", wheel(""), "--json")
    assert json_of(here)["compiler"] == "ziglang cc"


@pytest.mark.parametrize(
    ("core", "options", "message"),
    [
        ("armv7e-m", "-target riscv32-freestanding-none", "compiles for RISCV"),
        ("armv6-m", "-target thumb-freestanding-eabi -mcpu=cortex_m4", "v7E-M; accepted: code that cortex-m0 runs"),
        ("rv32imc", "-target riscv32-freestanding-none -mcpu=generic_rv32+m+c+f", "code that rv32 runs"),
        ("rv32imc", "-target riscv64-freestanding-none", "code that rv32 runs"),
        ("armv7e-m", "", "code that cortex-m4 runs"),
        ("armv7e-m", "-DINT32_MAX -target thumb-freestanding-eabi -mcpu=cortex_m4 -nosuchoption", "refuses the code"),
    ],
)
def test_a_compiler_for_another_core_is_refused(core, options, message, tmp_path):
    assert message in refused(bench_of(tmp_path, "", "--target", core, "--cc", wheel(options)))


def test_a_program_without_symbols_is_refused(tmp_path):
    own = wheel("-target riscv32-freestanding-none -mcpu=generic_rv32+m+c -fno-sanitize=all -O2 -s")
    assert "leave out -s" in refused(bench_of(tmp_path, "", "--cc", own))


@pytest.mark.parametrize(("text", "code"), [("nosuch-gcc -O2", 3), ("", 2), ("'gcc", 2)])
def test_a_compiler_that_is_not_there(text, code, tmp_path):
    result = bench_of(tmp_path, "", "--cc", text)
    assert result.exit_code == code
    assert "--cc" in result.stderr
    assert result.stdout == ""


@pytest.mark.parametrize("missing", ["unicorn", "elftools.elf.elffile", "ziglang"])
def test_a_part_that_is_missing_is_named(missing, tmp_path, monkeypatch):
    if missing == "ziglang":
        find = importlib.util.find_spec
        monkeypatch.setattr(
            "importlib.util.find_spec", lambda name, *rest: None if name == missing else find(name, *rest)
        )
    else:
        monkeypatch.setitem(sys.modules, missing, None)
    result = bench_of(tmp_path)
    assert result.exit_code == 3
    assert "pip install 'afterkick[bench]'" in result.stderr
    assert result.stdout == ""


def test_wrong_designs_targets_and_profiles(tmp_path):
    assert 'did you mean "armv7e-m"' in refused(bench_of(tmp_path, "", "--target", "armv7em"))
    assert "model" in refused(run("bench", write(tmp_path, '[design]\nname = "x"', "wrong.toml")))
    own = tmp_path / "own"
    own.mkdir()
    profile = (TARGETS / "rv32imc.toml").read_text(encoding="utf-8")
    (own / "mine.toml").write_text(profile.replace('core = "rv32"', 'core = "rv33"'), encoding="utf-8")
    options = ("--targets", str(own), "--target", "mine")
    assert "cortex-m0, cortex-m4, rv32" in refused(bench_of(tmp_path, "", *options))
    (own / "mine.toml").write_text(profile.replace("-ffreestanding", "-nosuchoption"), encoding="utf-8")
    assert "[compiler] in the profile" in refused(bench_of(tmp_path, "", *options))
    (own / "mine.toml").write_text(profile.replace("-O2", "-Os"), encoding="utf-8")
    assert bench_of(tmp_path, "", *options).exit_code == 0
