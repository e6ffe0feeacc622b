"""Target profiles: those of the package, and what is said of wrong ones."""

import subprocess
import sys

import pytest

from afterkick.emit import emit_c
from afterkick.errors import Refused
from afterkick.resources import resource_folder
from afterkick.targets import find_target, load_targets
from fixed.random_designs import random_program

SHIPPED = ["armv6-m", "armv7e-m", "armv7e-m-fp", "host", "plain-16", "rv32imc"]
GOOD = (resource_folder("targets") / "rv32imc.toml").read_text()


def test_shipped_profiles():
    profiles = load_targets()
    assert list(profiles) == SHIPPED
    assert profiles["armv6-m"].accumulator_bits == (32,)
    assert profiles["plain-16"].int_bits == 16
    assert profiles["armv7e-m-fp"].floats
    assert not profiles["armv7e-m"].floats


@pytest.mark.parametrize("name", SHIPPED)
def test_emitted_c_compiles_for_every_profile(name, tmp_path):
    compiler = find_target(name).compiler
    program = random_program(2)
    for file, text in emit_c(program).items():
        (tmp_path / file).write_text(text)
    target = ["-target", compiler.target] if compiler.target else []
    for source in (f"{program.name}.c", f"{program.name}_selftest.c"):
        command = [sys.executable, "-m", "ziglang", "cc", *target, *compiler.flags, "-std=c99", "-Wall", "-Wextra"]
        command += ["-Wpedantic", "-Wconversion", "-Wsign-conversion", "-Werror", "-c", source, "-o", "probe.o"]
        done = subprocess.run(command, cwd=tmp_path, capture_output=True, text=True, check=False)
        assert done.returncode == 0, done.stderr


def test_own_profiles_add_and_replace(tmp_path):
    (tmp_path / "mine.toml").write_text(GOOD.replace('title = "', 'title = "my '))
    (tmp_path / "rv32imc.toml").write_text(GOOD.replace('title = "', 'title = "other '))
    profiles = load_targets(tmp_path)
    assert profiles["mine"].title.startswith("my ")
    assert profiles["rv32imc"].title.startswith("other ")
    assert find_target("mine", tmp_path).name == "mine"


def test_unknown_target_is_refused_with_the_nearest():
    with pytest.raises(Refused, match=r'did you mean "armv7e-m"'):
        find_target("armv7em")


@pytest.mark.parametrize(
    ("old", "new", "message"),
    [
        ("word_bits = 32", "word_bits = '32'", "word_bits: found '32'; accepted: a positive integer"),
        ("word_bits = 32", "word_bits = true", "word_bits: found True"),
        ("word_bits = 32", "word_bits = 0", "word_bits: found 0"),
        ("word_bits = 32", "word_bit = 32", "did you mean word_bits?"),
        ("word_bits = 32", "", "word_bits: missing"),
        ("accumulator_bits = [32]", "accumulator_bits = 32", "a list of positive integers"),
        ("accumulator_bits = [32]", 'accumulator_bits = ["32"]', "a list of positive integers"),
        ("[emulator]", "[emulators]", "did you mean emulator?"),
        ('core = "rv32"', "core = 7", "emulator.core: found 7"),
        ("[compiler]", "[compiler", "can't be read"),
        ("title =", "name = 'x'\ntitle =", "name: unknown key"),
    ],
)
def test_wrong_profiles_are_refused(tmp_path, old, new, message):
    assert old in GOOD
    (tmp_path / "mine.toml").write_text(GOOD.replace(old, new))
    with pytest.raises(Refused) as caught:
        load_targets(tmp_path)
    assert message in str(caught.value)
    assert "mine.toml" in str(caught.value)


def test_folder_that_is_none_is_refused(tmp_path):
    with pytest.raises(Refused, match="is no folder"):
        load_targets(tmp_path / "nothing")
