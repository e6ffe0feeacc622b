"""C that was broken on purpose: the bench has to see it, and to say where."""

import numpy as np
import pytest

from afterkick.emit import emit_c
from bench.shared import on, random_kind
from fixed.random_designs import program_of

TWO = program_of(([0.2, 0.4, 0.2], [-1.2, 0.5]), ([0.3, 0, -0.3], [-0.9, 0.3]), carry=1, name="two")


def broken(old: str, new: str, file: str = "two.c", program=TWO) -> dict[str, str]:
    files = emit_c(program)
    assert files[file].count(old) == 1, "the emitted C has changed: adapt the mutant"
    return {**files, file: files[file].replace(old, new)}


@pytest.mark.parametrize("core", ["armv6-m", "armv7e-m", "rv32imc", "host"])
def test_a_coefficient_off_by_one_in_the_second_section(core):
    found = on(core, TWO, broken("INT64_C(29491)", "INT64_C(29492)"))
    assert found.equal is False
    assert found.selftest >= 0
    first = found.first_difference
    assert first.call == "step"
    assert {word.section for word in first.words} == {2}
    assert first.index is None or first.expected != first.found
    assert all(word.expected != word.found for word in first.words)


MUTANTS = {
    "sign": ("sum_v1 -= INT32_C(8192)", "sum_v1 += INT32_C(8192)", 1),
    "coefficient": ("INT32_C(26214)", "INT32_C(26213)", 1),
    "shift": ("two_nearest_32(sum_v1, 14)", "two_nearest_32(sum_v1, 13)", 1),
    "shift of the second section": ("two_nearest_64(sum_y, 15)", "two_nearest_64(sum_y, 16)", 2),
    "rounding": ("two_shift_32(value + (INT32_C(1) << (places - 1)), places)", "two_shift_32(value, places)", 1),
    "lost feedback": ("sum_y += state->dropped_y_1;", "", 2),
    "order of the history": (
        "state->x_2 = state->x_1;\n    state->x_1 = x;",
        "state->x_1 = x;\n    state->x_2 = x;",
        1,
    ),
    "memory that nothing shows yet": ("state->y_2 = state->y_1;\n", "state->y_2 = (int16_t)(state->y_1 + 1);\n", 2),
    "reset that forgets": ("state->dropped_y_1 = 0;\n", "", 2),
}


@pytest.mark.parametrize("name", MUTANTS)
def test_mutants_of_the_step(name):
    old, new, section = MUTANTS[name]
    found = on("armv7e-m", TWO, broken(old, new))
    assert found.equal is False
    assert found.first_difference.words[0].section == section


LOOP = "for (i = 0; i < count; ++i) {"
RUNS = {
    "the last sample of odd blocks": (LOOP, f"{LOOP} if ((count & 1) && i + 1 == count) {{ continue; }}"),
    "in place": ("two_step(state, input[i])", "two_step(state, input[(output == input && i) ? i - 1 : i])"),
    "a block of none": (LOOP, f"if (count == 0) {{ state->x_1 = 7; }}\n {LOOP}"),
    "a block of one": (LOOP, f"if (count == 1) {{ two_reset(state); }}\n {LOOP}"),
}


@pytest.mark.parametrize("name", RUNS)
def test_mutants_of_the_run(name):
    found = on("armv7e-m", TWO, broken(*RUNS[name]))
    assert found.equal is False
    assert found.first_difference.call == "run"
    assert found.first_difference.after is not None


def test_a_mutant_of_the_preset():
    program = random_kind("preset", 0)
    files = emit_c(program)
    name = f"{program.name}_reset(state);\n"
    assert files[f"{program.name}.c"].count(name) == 1
    ends = files[f"{program.name}.c"].index(name) + len(name)
    files[f"{program.name}.c"] = files[f"{program.name}.c"][:ends] + "    return;\n" + files[f"{program.name}.c"][ends:]
    found = on("rv32imc", program, files)
    assert found.equal is False
    assert found.first_difference.stimulus.startswith("preset")
    assert found.first_difference.after == 0


def test_a_mutant_of_a_clamp():
    loud = program_of(([3.5], []), name="loud")
    files = broken("INT32_C(32767))", "INT32_C(32766))", "loud.c", loud)
    found = on("rv32imc", loud, files)
    assert found.equal is False
    assert (found.first_difference.expected, found.first_difference.found) == (32767, 32766)
    assert found.first_difference.words == ()  # this filter remembers nothing


def test_a_mutant_of_a_single():
    """A last place of a coefficient."""
    program = random_kind("float32", 3)
    name = f"{program.name}.c"
    text = emit_c(program)[name]
    old = next(line for line in text.splitlines() if "a1_" in line and "f * " in line).split(" = ")[1].split("f * ")[0]
    new = str(np.nextafter(np.float32(old), np.float32(0)))
    found = on("armv7e-m-fp", program, broken(f" = {old}f", f" = {new}f", name, program))
    assert found.equal is False
    assert found.first_difference.words[0].section == 1


def test_a_self_test_that_fails_is_not_equal():
    found = on("rv32imc", TWO, broken("return (checksum ==", "return (checksum !=", "two_selftest.c"))
    assert found.equal is False
    assert found.selftest >= 0
    assert found.first_difference.call == "selftest"


NOWHERE = "*(volatile int *)0x40000000 = 1;"
CONSTANT = "static const int16_t table[2] = {1, 2}; *(volatile int16_t *)(uintptr_t)&table[count & 1] = 3;"
FAULTS = {
    "a store to nowhere": ("uint32_t i;\n", f"uint32_t i; {NOWHERE}\n", "two_run stops at"),
    "one sample too many": ("i < count", "i <= count", "Invalid memory"),
    "a store into constants": ("uint32_t i;\n", f"uint32_t i; {CONSTANT}\n", "two_run stops at"),
    "no end": ("uint32_t i;\n", "uint32_t i; volatile int go = 1; while (go) { }\n", "does not return within 1 s"),
}


@pytest.mark.parametrize("core", ["armv6-m", "rv32imc"])
@pytest.mark.parametrize("name", FAULTS)
def test_code_that_strays_is_stopped(core, name, monkeypatch):
    monkeypatch.setattr("afterkick.bench.core.TIME_LIMIT_S", 1)
    old, new, message = FAULTS[name]
    found = on(core, TWO, broken(old, new))
    assert found.equal is False
    assert message in found.first_difference.fault
    assert found.instructions is None
