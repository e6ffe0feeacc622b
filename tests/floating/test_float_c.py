"""Emitted C of single precision against the simulator, bit for bit, and as text.

Forty random designs go into one executable with a generated driver.  gcc is used where it is present; the compiler of
the ziglang wheel, a dependency of the tests, always.
"""

import functools
import os
import re
import shutil
import sys
from pathlib import Path

import numpy as np
import pytest
from flint import fmpq

import afterkick
from afterkick.bench import compare_on_host, compile_on_host, run_on_host
from afterkick.design.schema import Signal, Signals
from afterkick.emit import emit_c
from afterkick.errors import Refused
from afterkick.floating import FloatProgram, float_program, simulate_float
from emit.test_c_against_simulator import WARNINGS, ZIG, call
from emit.test_c_text import FORBIDDEN, HOSTILE, code_without_comments
from fixed.random_designs import PlainSampled
from floating.random_filters import SIGNALS, random_filter
from floating.test_float_simulator import stimulus

SEED = "AFTERKICK_SEED"
"""An environment variable: run the random design of this seed alone."""
SEEDS = [int(os.environ[SEED])] if SEED in os.environ else list(range(40))
GOLDEN = Path(__file__).parent / "golden"
UPDATE = "AFTERKICK_UPDATE_GOLDEN"
VERSION = f"afterkick {afterkick.__version__}"
BLOCK = 37

STRICT = [*WARNINGS, "-Wdouble-promotion", "-ffp-contract=off"]
COMMANDS = {
    "gcc": ["gcc", "-std=c99", "-O2"],
    "g++": ["g++", "-std=c++17", "-O1", "-x", "c++"],
    "zig cc": [*ZIG, "cc", "-std=c99", "-O2", "-g0"],
    "zig c++": [*ZIG, "c++", "-std=c++17", "-O1", "-g0", "-x", "c++", "-fno-exceptions", "-fno-rtti"],
}
SANITIZER = ["-fsanitize=undefined", "-fno-sanitize-recover=all"]

DRIVER_HEAD = """
#include <stdint.h>
#include <stdio.h>

static float number(void)
{
    float value = 0.0f;
    if (fread(&value, sizeof value, 1, stdin) != 1) {
        value = 0.0f;
    }
    return value;
}

static void answer(float value)
{
    (void)fwrite(&value, sizeof value, 1, stdout);
}
"""

# Step over all samples into one half of the answer, run in place over blocks into the other; then the self-test.
DRIVER_PART = """
#include "{name}.c"
#include "{name}_selftest.c"
static float {name}_samples[{length}];
static void {name}_drive(void)
{{
    {name}_state state;
    uint32_t done = 0;
    int32_t i;
    {name}_reset(&state);
    for (i = 0; i < {length}; ++i) {{
        {name}_samples[i] = number();
        answer({name}_step(&state, {name}_samples[i]));
    }}
    {name}_reset(&state);
    {name}_run(&state, {name}_samples, {name}_samples, 0);
    while (done < {length}) {{
        const uint32_t left = {length} - done;
        const uint32_t block = (left < {block}) ? left : {block};
        {name}_run(&state, {name}_samples + done, {name}_samples + done, block);
        done += block;
    }}
    for (i = 0; i < {length}; ++i) {{
        answer({name}_samples[i]);
    }}
    answer((float){name}_selftest());
}}
"""


def corners() -> list[FloatProgram]:
    """No state, no feedback, factors that fold, a delay, states that are flushed or die away into subnormals."""
    sections = [
        ([1], []),
        ([-1], []),
        ([0.7], []),
        ([0, 0, 1], []),
        ([1, -2, 1], [-1.6, 0.64]),
        ([0.3, 0, -0.3], [0.3, 0.3]),
        ([-1, 1], [-0.5]),
        ([1e-37, 1e-37], [-0.5]),
        ([1e36, 1e36], [-0.5]),
    ]
    programs = []
    for k, section in enumerate(sections):
        for delay in (0, 2):
            for flush in (None, fmpq(1, 10**20)):
                name = f"corner{k}_{delay}{'f' if flush else ''}"
                plain = PlainSampled((section,), delay)
                programs.append(float_program(plain, SIGNALS, name, flush_below=flush))
    return programs


@functools.cache
def programs_of(seeds: tuple[int, ...]) -> list[FloatProgram]:
    return [random_filter(seed)[0] for seed in seeds] + corners()


def inputs_of(program: FloatProgram, seed: int) -> np.ndarray:
    """Noise, steps, and a kick that dies away into subnormals."""
    return np.concatenate([stimulus(seed), [12.0], np.zeros(1200)]).astype(np.float32)


def compare(compiler: str, seeds: list[int], folder: Path) -> None:
    if compiler in ("gcc", "g++") and shutil.which(compiler) is None:
        pytest.skip(f"no {compiler} here; the compiler of the wheel is always used")
    programs = programs_of(tuple(seeds))
    inputs = [inputs_of(program, seed) for seed, program in enumerate(programs)]
    parts = [DRIVER_HEAD]
    for program, samples in zip(programs, inputs, strict=True):
        for name, text in emit_c(program).items():
            (folder / name).write_text(text, encoding="ascii")
        parts.append(DRIVER_PART.format(name=program.name, length=samples.size, block=BLOCK))
    calls = "".join(f"    {program.name}_drive();\n" for program in programs)
    (folder / "driver.c").write_text("\n".join([*parts, "int main(void)\n{\n" + calls + "    return 0;\n}\n"]))
    call([*COMMANDS[compiler], *STRICT, *SANITIZER, "-c", "driver.c", "-o", "driver.o"], folder)
    # C++ of the wheel is linked as C: building its C++ runtime would take minutes, and the code needs none of it.
    linker = [*ZIG, "cc"] if compiler.startswith("zig") else COMMANDS[compiler][:1]
    call([*linker, *SANITIZER, "driver.o", "-o", "probe"], folder)
    output = call(["./probe"], folder, input=np.concatenate(inputs).tobytes())
    answers = np.frombuffer(output, dtype=np.float32)
    for program, samples in zip(programs, inputs, strict=True):
        expected = simulate_float(program, samples).view(np.uint32)
        stepped, run, verdict = np.split(answers[: 2 * samples.size + 1], [samples.size, 2 * samples.size])
        answers = answers[2 * samples.size + 1 :]
        again = f"{compiler}, {program.name}; a random design alone: {SEED}=NUMBER python -m pytest {__file__}"
        assert (stepped.view(np.uint32) == expected).all(), f"step: {again}"
        assert (run.view(np.uint32) == expected).all(), f"run: {again}"
        assert verdict.tolist() == [-1.0], f"self-test: {again}"
    assert answers.size == 0


@pytest.mark.parametrize("compiler", list(COMMANDS))
def test_bit_for_bit(compiler, tmp_path):
    compare(compiler, SEEDS, tmp_path)


@pytest.mark.parametrize("seed", range(8))
def test_compare_on_host(seed):
    program = random_filter(seed)[0]
    assert compare_on_host(emit_c(program), program, 4096).equal


@pytest.mark.parametrize(
    ("old", "new"), [("-1.7f", "-1.7000002f"), ("state->s1_2 - a1_v1 + b1_x", "state->s1_2 + b1_x - a1_v1")]
)
def test_compare_on_host_tells_a_last_place(old, new):
    plain = PlainSampled((([0.02, 0.03, 0.01], [-1.7, 0.745]), ([0.3, 0.2], [-0.5])))
    program = float_program(plain, SIGNALS, "probe")
    files = emit_c(program)
    assert compare_on_host(files, program, 4096).equal
    assert old in files["probe.c"]
    files["probe.c"] = files["probe.c"].replace(old, new)
    assert not compare_on_host(files, program, 4096).equal
    # by the outputs alone, too
    files["probe_selftest.c"] = '#include "probe_selftest.h"\nint32_t probe_selftest(void) { return -1; }\n'
    assert not compare_on_host(files, program, 4096).equal


def test_steps_on_the_host_are_those_of_a_run():
    program = random_filter(1)[0]
    samples = stimulus(1)
    with compile_on_host(emit_c(program), program) as compiled:
        compiled.reset()
        stepped = np.array([compiled.step(float(sample)) for sample in samples], np.float32)
        compiled.reset()
        assert (stepped.view(np.uint32) == compiled.run(samples).view(np.uint32)).all()
    inputs = np.stack([samples, samples[::-1]], axis=1)
    found = run_on_host(emit_c(program), program, inputs)
    assert (found.outputs.view(np.uint32) == simulate_float(program, inputs).view(np.uint32)).all()
    assert found.selftest == -1


def selftest_verdict(files: dict[str, str], name: str, folder: Path, command: list[str]) -> int:
    for file, text in files.items():
        (folder / file).write_text(text, encoding="ascii")
    main = f'#include "{name}_selftest.h"\n#include <stdio.h>\n'
    main += f'int main(void) {{ printf("%d", (int){name}_selftest()); return 0; }}\n'
    (folder / "main.c").write_text(main)
    call([*command, "main.c", f"{name}.c", f"{name}_selftest.c", "-o", "selftest"], folder)
    return int(call(["./selftest"], folder))


def plain_files() -> dict[str, str]:
    plain = PlainSampled((([0.02, 0.03, 0.01], [-1.7, 0.745]), ([0.3, 0.2], [-0.5])))
    return emit_c(float_program(plain, SIGNALS, "probe"))


def test_self_test_tells_equal_near_and_wrong(tmp_path):
    files = plain_files()
    command = [*ZIG, "cc", "-std=c99", "-O1", "-g0"]
    assert selftest_verdict(files, "probe", tmp_path, command) == -1

    def changed(old: str, new: str) -> dict[str, str]:
        assert old in files["probe.c"]
        return {**files, "probe.c": files["probe.c"].replace(old, new, 1)}

    near = changed("state->s1_2 - a1_v1 + b1_x", "state->s1_2 + b1_x - a1_v1")
    assert selftest_verdict(near, "probe", tmp_path, command) == -2
    assert selftest_verdict(changed("-1.7f", "-1.699f"), "probe", tmp_path, command) >= 0
    assert selftest_verdict(changed("return y;", "return 0.0f;"), "probe", tmp_path, command) == 0
    nan = changed("return y;", "return (y - y) / (y - y);")
    assert selftest_verdict(nan, "probe", tmp_path, command) == 0
    # only the generated samples go through run
    run = changed("probe_step(state, input[i])", "probe_step(state, input[0])")
    assert selftest_verdict(run, "probe", tmp_path, command) >= 128


def has_fused_products() -> bool:
    info = Path("/proc/cpuinfo")
    return info.exists() and " fma " in info.read_text()


@pytest.mark.skipif(not has_fused_products(), reason="this processor has no fused multiply-add")
def test_fused_products_are_near_and_statements_keep_most_compilers_from_them(tmp_path):
    """Fusing within expressions only, as ISO C allows it (6.5, paragraph 8), changes nothing; fusing across does."""
    files = plain_files()
    clang = [*ZIG, "cc", "-std=c99", "-O2", "-g0", "-mfma"]
    assert selftest_verdict(files, "probe", tmp_path, [*clang, "-ffp-contract=on"]) == -1
    assert selftest_verdict(files, "probe", tmp_path, [*clang, "-ffp-contract=fast"]) == -2


@pytest.mark.skipif(not has_fused_products(), reason="this processor has no fused multiply-add")
def test_compare_on_host_fuses_nothing(monkeypatch):
    monkeypatch.setenv("CC", f"{sys.executable} -m ziglang cc -mfma -ffp-contract=fast")
    program = random_filter(1)[0]
    assert compare_on_host(emit_c(program), program, 1024).equal


@pytest.mark.parametrize("language", [["cc", "-std=c99"], ["c++", "-std=c++17", "-x", "c++"]], ids=["C99", "C++17"])
def test_each_header_stands_on_its_own(language, tmp_path):
    files = plain_files()
    for name, text in files.items():
        (tmp_path / name).write_text(text)
    for header in ("probe.h", "probe_selftest.h"):
        (tmp_path / "alone.c").write_text(f'#include "{header}"\n#include "{header}"\ntypedef int nothing;\n')
        call([*ZIG, language[0], *language[1:], *WARNINGS, "-c", "alone.c", "-o", "alone.o"], tmp_path)


@pytest.mark.parametrize("seed", range(20))
def test_what_must_not_appear(seed):
    program, _ = random_filter(seed)
    for name, text in emit_c(program).items():
        for pattern in FORBIDDEN:
            if "float" in pattern:
                continue
            assert not re.search(pattern, text, flags=re.MULTILINE), f"{pattern} in {name}, seed {seed}"
        assert text.endswith("\n")
        assert not text.endswith("\n\n")
        includes = {"<stdint.h>", "<float.h>", *(f'"{program.name}{end}.h"' for end in ("", "_selftest"))}
        assert set(re.findall(r"#include (.*)", text)) <= includes
        # every decimal in code is a float, so nothing is ever promoted
        numbers = re.findall(r"(?<![\w.])\d+\.?\d*(?:e[+-]?\d+)?f?\b", code_without_comments(text))
        assert all(number.endswith("f") for number in numbers if "." in number or "e" in number)
        defined = re.findall(r"^(?:static )?(?:inline |const )*(?:float|u?int\d+_t|int|void) (\w+)", text, re.M)
        assert all(symbol.startswith(program.name) for symbol in defined)


@pytest.mark.parametrize("text", HOSTILE)
def test_text_of_a_design_stays_in_its_comment(text):
    signals = Signals(Signal(text.strip() or "g", fmpq(1)), Signal(text.strip(), fmpq(1)))
    plain = PlainSampled((([0.5], [-0.5]),))
    ordinary = emit_c(float_program(plain, Signals(), "probe"))
    hostile = emit_c(float_program(plain, signals, "probe", title=text), notes=(text,))
    for name in ordinary:
        assert code_without_comments(hostile[name]).split() == code_without_comments(ordinary[name]).split()


def test_same_program_same_bytes_and_a_bad_name_is_refused():
    files = plain_files()
    assert plain_files() == files
    with pytest.raises(Refused, match=r"design\.name"):
        emit_c(float_program(PlainSampled((([1], []),)), Signals(), "int"))


def test_what_overflows_is_refused():
    unstable = float_program(PlainSampled((([1], [-1.25]),)), Signals(), "probe")
    with pytest.raises(Refused, match="beyond the largest single"):
        emit_c(unstable)


def test_header_says_what_it_is():
    plain = PlainSampled((([0.001, 0.002, 0.001], [-1.9, 0.905]),), 3)
    program = float_program(plain, SIGNALS, "probe", title="Demo", digest="5f3a9c01", flush_below=fmpq(1, 10**30))
    header = re.sub(r"[\s*]+", " ", emit_c(program, notes=("A figure.",))["probe.h"])
    for words in (
        VERSION,
        "design 5f3a9c01",
        "single precision, transposed direct form II",
        "at 1000 Hz",
        "-ffp-contract=off",
        "Input: in g, promised to stay within 12 g.",
        "Output: in m/s^2.",
        "Delay in front of the sections: 3 samples.",
        "all below 1e-30f",
        "A figure.",
        "NaN",
        "verify the filter on the real hardware",
    ):
        assert words in header


def test_golden_files():
    plain = PlainSampled((([0.02, 0.04, 0.02], [-1.56, 0.64]), ([0.5, 0.5], [-0.25])), 1)
    program = float_program(
        plain,
        SIGNALS,
        "skiff",
        title="Hull-slam accelerometer of the survey skiff",
        digest="5f3a9c01",
        flush_below=fmpq(1, 10**30),
    )
    files = {
        name: text.replace(VERSION, "afterkick VERSION")
        for name, text in emit_c(program, notes=("A note.",)).items()
        if "selftest" not in name
    }
    if os.environ.get(UPDATE):
        GOLDEN.mkdir(exist_ok=True)
        for name, text in files.items():
            (GOLDEN / f"{name}.txt").write_text(text, encoding="ascii", newline="\n")
    expected = {path.name.removesuffix(".txt"): path.read_bytes().decode("ascii") for path in GOLDEN.iterdir()}
    assert files == expected, f"if the change is meant: {UPDATE}=1 python -m pytest {__file__}"
