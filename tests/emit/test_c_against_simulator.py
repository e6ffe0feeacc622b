"""Emitted C against the simulator, integer for integer, under the undefined-behaviour sanitizer.

Twenty random designs go into one executable with a generated driver.  gcc is used where it is present; the compiler of
the ziglang wheel, a dependency of the tests, always: without it these tests fail.
"""

import functools
import os
import shutil
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest
from attrs import evolve

from afterkick.bench import compile_on_host, run_on_host
from afterkick.bench.compilers import find_compiler
from afterkick.emit import emit_c
from afterkick.errors import Lacking, Refused
from afterkick.fixed import simulate
from afterkick.fixed.program import Program
from fixed.carried_designs import carried_program, codes_within, relaxed_programs
from fixed.random_designs import program_of, random_codes, random_program

BATCH = 20
SEED = "AFTERKICK_SEED"
"""An environment variable: run the random design of this seed alone."""
SEEDS = [[int(os.environ[SEED])]] if SEED in os.environ else [list(range(k, k + BATCH)) for k in range(0, 220, BATCH)]
WARNINGS = ["-Wall", "-Wextra", "-Wpedantic", "-Wconversion", "-Wsign-conversion", "-Werror"]
SANITIZER = ["-fsanitize=undefined", "-fno-sanitize-recover=all"]
ZIG = [sys.executable, "-m", "ziglang"]
BLOCK = 37

DRIVER_HEAD = """
#include <stdint.h>
#include <stdio.h>

static int32_t number(void)
{
    int32_t value = 0;
    if (fread(&value, sizeof value, 1, stdin) != 1) {
        value = 0;
    }
    return value;
}

static void answer(int32_t value)
{
    (void)fwrite(&value, sizeof value, 1, stdout);
}
"""

# Step over all samples into one half of the answer, run in place over blocks, a block of none among them, into the
# other; then the self-test.
DRIVER_PART = """
#include "{name}.c"
#include "{name}_selftest.c"
static {type} {name}_codes[{length}];
static void {name}_drive(void)
{{
    {name}_state state;
    uint32_t done = 0;
    int32_t i;
    {name}_reset(&state);
    for (i = 0; i < {length}; ++i) {{
        {name}_codes[i] = ({type})number();
        answer({name}_step(&state, {name}_codes[i]));
    }}
    {name}_reset(&state);
    {name}_run(&state, {name}_codes, {name}_codes, 0);
    while (done < {length}) {{
        const uint32_t left = {length} - done;
        const uint32_t block = (left < {block}) ? left : {block};
        {name}_run(&state, {name}_codes + done, {name}_codes + done, block);
        done += block;
    }}
    for (i = 0; i < {length}; ++i) {{
        answer({name}_codes[i]);
    }}
    answer({name}_selftest());
}}
"""


def driver(programs: list[Program], lengths: list[int]) -> str:
    parts = [DRIVER_HEAD]
    for program, length in zip(programs, lengths, strict=True):
        bits = next(width for width in (8, 16, 32) if width >= program.data_bits)
        parts.append(DRIVER_PART.format(name=program.name, type=f"int{bits}_t", length=length, block=BLOCK))
    calls = "".join(f"    {program.name}_drive();\n" for program in programs)
    return "\n".join([*parts, "int main(void)\n{\n" + calls + "    return 0;\n}\n"])


def call(command: list[str], folder: Path, **options) -> bytes:
    done = subprocess.run(command, cwd=folder, capture_output=True, timeout=300, check=False, **options)
    assert done.returncode == 0, f"{' '.join(command[:6])} ...: {done.stderr.decode(errors='replace')[:3000]}"
    return done.stdout


COMMANDS = {
    "gcc": ["gcc", "-std=c99", "-O1"],
    "g++": ["g++", "-std=c++17", "-O0", "-x", "c++"],
    "zig cc": [*ZIG, "cc", "-std=c99", "-O0", "-g0"],
    "zig c++": [*ZIG, "c++", "-std=c++17", "-O0", "-g0", "-x", "c++", "-fno-exceptions", "-fno-rtti"],
}


def build(compiler: str, folder: Path) -> None:
    """driver.c, which includes all the sources, as ``probe``: warnings as errors."""
    call([*COMMANDS[compiler], *WARNINGS, *SANITIZER, "-c", "driver.c", "-o", "driver.o"], folder)
    # C++ of the wheel is linked as C: building its C++ runtime would take minutes, and the code needs none of it.
    linker = [*ZIG, "cc"] if compiler.startswith("zig") else COMMANDS[compiler][:1]
    call([*linker, *SANITIZER, "driver.o", "-o", "probe"], folder)


@functools.cache
def programs_of(seeds: tuple[int, ...]) -> list[Program]:
    return [random_program(seed) for seed in seeds]


def compare(compiler: str, seeds: list[int], programs: list[Program], folder: Path) -> None:
    inputs = [
        codes_within(program, seed) if program.proof else random_codes(program, seed)
        for program, seed in zip(programs, seeds, strict=True)
    ]
    for program in programs:
        for name, text in emit_c(program).items():
            (folder / name).write_text(text, encoding="ascii")
    (folder / "driver.c").write_text(driver(programs, [len(codes) for codes in inputs]))
    build(compiler, folder)
    output = call(["./probe"], folder, input=np.concatenate(inputs).astype(np.int32).tobytes())
    answers = np.frombuffer(output, dtype=np.int32)
    for seed, program, codes in zip(seeds, programs, inputs, strict=True):
        expected = simulate(program, codes)
        stepped, run, verdict = np.split(answers[: 2 * len(codes) + 1], [len(codes), 2 * len(codes)])
        answers = answers[2 * len(codes) + 1 :]
        again = f"{compiler}, seed {seed}; alone: {SEED}={seed} python -m pytest {__file__} -k random_designs"
        assert (stepped == expected).all(), f"step: {again}"
        assert (run == expected).all(), f"run: {again}"
        assert verdict.tolist() == [-1], f"self-test: {again}"
    assert answers.size == 0


@pytest.mark.parametrize("seeds", SEEDS, ids=lambda seeds: f"seeds{seeds[0]}to{seeds[-1]}")
@pytest.mark.parametrize("compiler", ["gcc", "g++", "zig cc"])
def test_random_designs(compiler, seeds, tmp_path):
    if compiler in ("gcc", "g++") and shutil.which(compiler) is None:
        pytest.skip(f"no {compiler} here; the compiler of the wheel is always used")
    compare(compiler, seeds, programs_of(tuple(seeds)), tmp_path)


@pytest.mark.parametrize("compiler", ["gcc", "zig cc"])
def test_sanitizer_is_awake(compiler, tmp_path):
    """A sum that overflows stops the program: else the comparisons below would prove less than they say."""
    if compiler == "gcc" and shutil.which(compiler) is None:
        pytest.skip("no gcc here; the compiler of the wheel is always used")
    (tmp_path / "driver.c").write_text(
        "int main(int count, char **words)\n{ (void)words; return 2147483647 + count; }\n"
    )
    build(compiler, tmp_path)
    assert subprocess.run(["./probe"], cwd=tmp_path, capture_output=True, check=False).returncode != 0
    (tmp_path / "driver.c").write_text("int main(int count, char **words)\n{ (void)words; return count - 1; }\n")
    build(compiler, tmp_path)
    assert subprocess.run(["./probe"], cwd=tmp_path, capture_output=True, check=False).returncode == 0


def test_random_designs_as_cpp_with_the_compiler_of_the_wheel(tmp_path):
    compare("zig c++", SEEDS[0], programs_of(tuple(SEEDS[0])), tmp_path)


@functools.cache
def carried_and_relaxed() -> list[tuple[int, Program]]:
    """Sixty designs with error feedback of order 1 and 2: half of them as they are, half relaxed."""
    carried = [(seed, carried_program(seed)) for seed in range(120)]
    plain = [(seed, program) for seed, program in carried if program is not None][:30]
    relaxed = [(seed, evolve(after, name=f"relaxed{seed}")) for seed, _, after in relaxed_programs(30)]
    designs = [design for pair in zip(plain, relaxed, strict=True) for design in pair]
    return [(seed, program) for seed, program in designs if os.environ.get(SEED) in (None, str(seed))]


@pytest.mark.parametrize("start", range(0, 60, BATCH))
@pytest.mark.parametrize("compiler", ["gcc", "zig cc"])
def test_random_designs_carried_and_relaxed(compiler, start, tmp_path):
    if compiler == "gcc" and shutil.which(compiler) is None:
        pytest.skip("no gcc here; the compiler of the wheel is always used")
    designs = carried_and_relaxed()[start : start + BATCH]
    if not designs:
        pytest.skip("one design alone, which is in the first batch")
    compare(compiler, [seed for seed, _ in designs], [program for _, program in designs], tmp_path)


def test_carried_and_relaxed_designs_as_cpp(tmp_path):
    designs = carried_and_relaxed()[:BATCH]
    compare("zig c++", [seed for seed, _ in designs], [program for _, program in designs], tmp_path)


def extremes() -> list[Program]:
    """The corners: no state, no feedback, one bit to spare, the widest and narrowest words, a long delay."""
    wide, narrow = {"data_bits": 32, "coefficient_bits": 32}, {"data_bits": 8, "coefficient_bits": 8}
    low_pass = ([0.2, 0.4, 0.2], [-1.2, 0.5])
    both = [
        ([([1], [])], {}),
        ([([-1], [])], {}),
        ([([-0.7], [])], {}),
        ([([3.5], [])], {}),
        ([([0, 0, 1], [])], {}),
        ([([1, -1], [])], {}),
        ([([1, -2, 1], [])], {}),
        ([([-1, 1], [1 - 2**-4, 0])], {}),
        ([([1, -2, 1], [-2 * 0.8, 0.8 * 0.8])], {}),
        ([low_pass] * 4, {}),
        ([([1], [-1])], {"marginal": True}),
        ([([1], [0, 1])], {"marginal": True}),
        ([low_pass], {"delay": 256}),
        ([([2.0**40], [])], {}),
        ([([2.0**-40], [])], {"coefficient_bits": 8}),
        ([low_pass], {"accumulator_bits": 64}),
    ]
    programs = []
    for sections, options in both:
        for words in (wide, narrow, {"data_bits": 12}):
            for rounding in ("nearest", "floor", "even"):
                for overflow in ("saturate", "wrap"):
                    arithmetic = {**words, **options, "rounding": rounding, "overflow": overflow}
                    try:
                        programs.append(program_of(*sections, name=f"corner{len(programs)}", **arithmetic))
                    except Refused:
                        continue
    return programs


def test_corner_designs(tmp_path):
    programs = extremes()
    assert len(programs) > 200
    compare("zig cc", list(range(len(programs))), programs, tmp_path)


@pytest.mark.parametrize("language", [["cc", "-std=c99"], ["c++", "-std=c++17", "-x", "c++"]], ids=["C99", "C++17"])
def test_each_header_stands_on_its_own(language, tmp_path):
    program = random_program(0)
    for name, text in emit_c(program).items():
        (tmp_path / name).write_text(text)
    for header in (f"{program.name}.h", f"{program.name}_selftest.h"):
        (tmp_path / "alone.c").write_text(f'#include "{header}"\n#include "{header}"\ntypedef int nothing;\n')
        call([*ZIG, language[0], *language[1:], *WARNINGS, "-c", "alone.c", "-o", "alone.o"], tmp_path)


def test_two_filters_of_one_design_do_not_meet():
    program = random_program(1)
    codes = np.array(random_codes(program, 1))
    with compile_on_host(emit_c(program), program) as compiled:
        compiled.reset()
        first = [compiled.step(int(code)) for code in codes]
        compiled.reset()
        assert [compiled.step(int(code)) for code in codes] == first == simulate(program, codes).tolist()


@pytest.mark.parametrize("command", ["", f"{sys.executable} -m ziglang cc"], ids=["found", "wheel"])
def test_run_on_host(command, monkeypatch):
    monkeypatch.setenv("CC", command)
    program = random_program(4)
    inputs = np.array([random_codes(program, k, 50) for k in range(3)]).T
    result = run_on_host(emit_c(program), program, inputs)
    assert result.selftest == -1
    assert (result.outputs == simulate(program, inputs)).all()
    single = run_on_host(emit_c(program), program, inputs[:, 0])
    assert (single.outputs == result.outputs[:, 0]).all()


def test_self_test_finds_a_wrong_filter():
    """One count in one coefficient of a section that passes the signal: the stored samples or the checksum notice."""
    program = program_of(([0.3, 0.3], [-0.4]), data_bits=16, coefficient_bits=16)
    files = emit_c(program)
    (section,) = program.sections
    right = f"INT32_C({section.b[0]})"
    assert right in files["probe.c"]
    wrong = {**files, "probe.c": files["probe.c"].replace(right, f"INT32_C({section.b[0] - 1})", 1)}
    assert run_on_host(wrong, program, np.zeros(4, dtype=int)).selftest >= 0
    broken = {**files, "probe.c": files["probe.c"].replace("return y;", "return 0;")}
    assert run_on_host(broken, program, np.zeros(4, dtype=int)).selftest == 0


def test_nothing_stays_on_the_disk(tmp_path, monkeypatch):
    monkeypatch.setattr("tempfile.tempdir", str(tmp_path))
    program = random_program(5)
    run_on_host(emit_c(program), program, np.zeros(8, dtype=int))
    assert list(tmp_path.iterdir()) == []


def test_missing_compiler_is_named(monkeypatch):
    monkeypatch.setenv("CC", "no-such-compiler")
    with pytest.raises(Lacking, match="no-such-compiler"):
        find_compiler()
    monkeypatch.delenv("CC")
    monkeypatch.setenv("PATH", "")
    assert find_compiler()[1:] == ("-m", "ziglang", "cc")
    monkeypatch.setattr("importlib.util.find_spec", lambda name: None)
    with pytest.raises(Lacking, match="no C compiler"):
        find_compiler()


def test_refused_code_is_reported_not_raised_raw():
    program = random_program(6)
    files = {**emit_c(program), f"{program.name}.c": "int broken(\n"}
    with pytest.raises(Refused, match="refuses the code"):
        run_on_host(files, program, np.zeros(4, dtype=int))


def test_other_names_do_not_exclude_each_other():
    """Two designs whose names differ in case only have different include guards."""
    one = evolve(random_program(0), name="Skiff")
    two = evolve(random_program(0), name="skiff")
    guards = [emit_c(program)[f"{program.name}.h"].split("#ifndef ")[1].split()[0] for program in (one, two)]
    assert guards[0] != guards[1]
