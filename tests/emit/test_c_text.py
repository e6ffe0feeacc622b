"""The emitted C as text: what must be there, what must not, and that no text of a design can break out."""

import os
import re
import subprocess
import sys
from pathlib import Path

import pytest
from attrs import evolve
from flint import fmpq

import afterkick
from afterkick.design.schema import Signal, Signals
from afterkick.emit import emit_c
from afterkick.emit.literals import container_bits, decimal, integer
from afterkick.emit.text import comment_lines, harmless
from afterkick.errors import Refused
from afterkick.fixed import simulate
from afterkick.fixed.carry import with_carry
from afterkick.fixed.program import SignalFormat, Term
from fixed.carried_designs import relaxed_programs
from fixed.random_designs import program_of, random_program

GOLDEN = Path(__file__).parent / "golden"
UPDATE = "AFTERKICK_UPDATE_GOLDEN"
VERSION = f"afterkick {afterkick.__version__}"

HOSTILE = [
    "ends */ int evil; /* the comment",
    "nested /* start",
    "a trigraph ??/",
    "???/ and ??'",
    "ends with a backslash \\",
    "*\\\n/ int evil;",
    "{{ 7 * 7 }} {% raw %} {# no #}",
    "quotes \" ' and %s %n",
    "µ-metre, Ω and \u202e reversed",
    "**//**//",
    "line\nbreak\r\nand tab\t",
    "*" * 300 + "/",
]

# The emitted code needs no word of these.
FORBIDDEN = [
    r"\bfloat\b",
    r"\bdouble\b",
    r"\bmalloc\b",
    r"\bstdio\b",
    r"\bprintf\b",
    r"\bgoto\b",
    r"\basm\b",
    r"\b(19|20)\d\d-\d\d-\d\d\b",
    r"__DATE__|__TIME__|__FILE__",
    r"/(home|tmp|usr|root|work)\b",
    r"[A-Z]:\\",
    r"[^\x00-\x7f]",
    r"\\$",
    r"\?\?",
    r"\t|[ ]$",
]


def demo():
    """A small filter of two sections, one of them of order 1, with a delay and units."""
    signals = Signals(Signal("g", fmpq(16), fmpq(12)), Signal("m/s^2", fmpq(320)))
    program = program_of(
        ([0.02, 0.04, 0.02], [-1.56, 0.64]),
        ([0.5, 0.5], [-0.25]),
        delay=1,
        name="skiff",
        signals=signals,
        title="Hull-slam accelerometer of the survey skiff",
    )
    return evolve(program, digest="5f3a9c01")


def code_without_comments(text: str) -> str:
    """What a compiler sees, after trigraphs and joined lines (translation phases 1 to 3, ISO/IEC 9899:1999 5.1.1.2)."""
    text = text.replace("??/", "\\").replace("\\\n", "")
    return re.sub(r"/\*.*?\*/", " ", text, flags=re.DOTALL)


def test_golden_files():
    files = {
        name: text.replace(VERSION, "afterkick VERSION") for name, text in emit_c(demo(), notes=("A note.",)).items()
    }
    if os.environ.get(UPDATE):
        GOLDEN.mkdir(exist_ok=True)
        for name, text in files.items():
            (GOLDEN / f"{name}.txt").write_text(text, encoding="ascii", newline="\n")
    expected = {path.name.removesuffix(".txt"): path.read_bytes().decode("ascii") for path in GOLDEN.iterdir()}
    assert files == expected, f"if the change is meant: {UPDATE}=1 python -m pytest {__file__}"


@pytest.mark.parametrize("seed", range(40))
def test_what_must_not_appear(seed):
    for name, text in emit_c(random_program(seed)).items():
        for pattern in FORBIDDEN:
            assert not re.search(pattern, text, flags=re.MULTILINE), f"{pattern} in {name}, seed {seed}"
        assert text.endswith("\n")
        assert not text.endswith("\n\n")
        assert set(re.findall(r"#include (.*)", text)) <= {
            "<stdint.h>",
            *(f'"design{seed}{end}.h"' for end in ("", "_selftest")),
        }


@pytest.mark.parametrize("seed", range(40))
def test_every_symbol_at_file_scope_has_the_prefix(seed):
    prefix = f"design{seed}_"
    for text in emit_c(random_program(seed)).values():
        code = code_without_comments(text)
        defined = re.findall(r"^(?:static )?(?:inline |const )*(?:u?int\d+_t|void|typedef char) \*?(\w+)", code, re.M)
        defined += re.findall(r"^#define (\w+)", code, re.M)
        assert all(name.startswith(prefix) for name in defined), f"seed {seed}"


@pytest.mark.parametrize("seed", range(40))
def test_helpers_only_where_used_and_no_shift_of_a_negative_value(seed):
    source = emit_c(random_program(seed))[f"design{seed}.c"]
    helpers = re.findall(r"^static inline \w+ (\w+)\(", source, re.M)
    assert len(helpers) == len(set(helpers))
    assert all(source.count(f"{helper}(") > 1 for helper in helpers), f"seed {seed}"
    shifts = [line.strip() for line in source.splitlines() if ">>" in line]
    assert set(shifts) <= {"return (value >= 0) ? (value >> places) : ~((~value) >> places);"}


def test_no_clamp_where_the_ranges_prove_it_idle():
    source = emit_c(program_of(([0.25], [0.5])))["probe.c"]
    assert "clamp" not in source
    assert "wrap" not in source
    assert "clamp" in emit_c(program_of(([0.75], [0.5])))["probe.c"]


def test_header_says_what_it_is():
    header = emit_c(demo(), notes=("Impulse response: 0.1 % of peak.",))["skiff.h"]
    header = re.sub(r"[\s*]+", " ", header)
    for text in (
        VERSION,
        "design 5f3a9c01",
        "Hull-slam accelerometer of the survey skiff",
        "belongs to whoever generated it",
        "zero-order-hold at 1000 Hz",
        "32768 stands for 16 g; promised to stay within 12 g",
        "32768 stands for 320 m/s^2",
        "Delay in front of the sections: 1 sample.",
        "DC gain of these integers:",
        "rounding = nearest, overflow = saturate",
        "Impulse response: 0.1 % of peak.",
        "verify the filter on the real hardware",
        "Local codes",
        "y = (",
        " - ",
    ):
        assert text in header


def test_error_feedback_is_told():
    files = emit_c(with_carry(demo(), 2))
    header = re.sub(r"[\s*]+", " ", files["skiff.h"])
    for text in (" + 2 dropped_y_1 - dropped_y_2) / 2^", "dropped_y = what that division drops", "carry = 2."):
        assert text in header
    source = code_without_comments(files["skiff.c"])
    for line in (
        "const int32_t quotient_v1 = skiff_nearest_32(sum_v1, 14);",
        "const int16_t dropped_v1 = (int16_t)(sum_v1 - quotient_v1 * INT32_C(16384));",
        "const int16_t v1 = (int16_t)skiff_clamp_32(quotient_v1, -INT32_C(32768), INT32_C(32767));",
        "sum_v1 -= state->dropped_v1_2;",
    ):
        assert line in source


@pytest.mark.parametrize("index", range(8))
def test_text_of_carried_and_relaxed_designs(index):
    for program in relaxed_programs(8)[index][1:]:
        for name, text in emit_c(program).items():
            for pattern in FORBIDDEN:
                assert not re.search(pattern, text, flags=re.MULTILINE), f"{pattern} in {name}"


def test_each_coefficient_is_explained():
    program = demo()
    source = emit_c(program)["skiff.c"]
    for section in program.sections:
        for coefficient in section.coefficients:
            stored = f"{coefficient.integer} * 2^{-coefficient.fraction_bits}"
            assert f"{coefficient.name} = {coefficient.exact}: {stored}, off by" in source


def test_same_program_same_bytes_in_every_process():
    probe = (
        "import hashlib; from fixed.random_designs import random_program; from afterkick.emit import emit_c;"
        "print(hashlib.sha256(repr(emit_c(random_program(7))).encode()).hexdigest())"
    )
    path = os.pathsep.join(path for path in sys.path if path)
    hashes = {
        subprocess.run(
            [sys.executable, "-c", probe],
            env={**os.environ, "PYTHONHASHSEED": seed, "PYTHONPATH": path},
            capture_output=True,
            text=True,
            check=True,
        ).stdout
        for seed in ("1", "2")
    }
    assert len(hashes) == 1


def test_small_change_small_diff():
    """Another coefficient changes the lines that show it, and no more of the source."""
    one = emit_c(program_of(([0.2, 0.4, 0.2], [-1.2, 0.5])))["probe.c"].splitlines()
    two = emit_c(program_of(([0.2, 0.4, 0.2], [-1.2, 0.5001])))["probe.c"].splitlines()
    assert len(one) == len(two)
    changed = [line for line, other in zip(one, two, strict=True) if line != other]
    assert len(changed) == 1
    assert "a2 = " in changed[0]


@pytest.mark.parametrize("text", HOSTILE)
def test_hostile_text_stays_in_its_comment(text):
    plain = emit_c(demo(), notes=("A note.",))
    program = evolve(
        demo(),
        title=text,
        digest=text,
        method=text,
        input_format=SignalFormat(text, fmpq(16), fmpq(12)),
        output_format=SignalFormat(text, fmpq(320), fmpq(320)),
    )
    hostile = emit_c(program, notes=(text, text))
    for name in plain:
        assert hostile[name].isascii()
        assert "evil" not in code_without_comments(hostile[name])
        assert code_without_comments(hostile[name]).split() == code_without_comments(plain[name]).split()
        assert "\\" not in hostile[name]


@pytest.mark.parametrize("text", HOSTILE)
def test_harmless_text_has_no_mark_in_it(text):
    for line in (harmless(text), *comment_lines(text, "  ")):
        assert not re.search(r"\*/|/\*|\?\?|\\|[^ -~]", line)


@pytest.mark.parametrize("name", ["for", "int32", "9lives", "a b", "", "x" * 100, "template", "a__b", "x;", "stdint"])
def test_impossible_names_are_refused(name):
    with pytest.raises(Refused, match=re.escape("design.name")):
        emit_c(evolve(demo(), name=name))


def test_a_program_that_could_overflow_is_refused():
    (section,) = program_of(([0.25], [0.5]), data_bits=32).sections
    wide = evolve(section.steps[-2], accumulator_bits=32, terms=(Term(3, "x"),))
    program = evolve(program_of(([0.25], [0.5]), data_bits=32), sections=(evolve(section, steps=(wide,)),))
    with pytest.raises(Refused, match="partial sum"):
        emit_c(program)


def test_own_templates_go_first(tmp_path):
    folder = tmp_path / "c"
    folder.mkdir()
    (folder / "header.h.j2").write_text("/* own {{ view.symbols.prefix }} */\n")
    files = emit_c(demo(), templates=tmp_path)
    assert files["skiff.h"] == "/* own skiff */\n"
    assert files["skiff.c"] == emit_c(demo())["skiff.c"]


@pytest.mark.parametrize("template", ["{{ view.nonsense }}", "{% if %}", "{{ 1 / 0 }}"])
def test_broken_own_template_is_refused(tmp_path, template):
    folder = tmp_path / "c"
    folder.mkdir()
    (folder / "source.c.j2").write_text(template)
    with pytest.raises(Refused, match=re.escape("source.c.j2")):
        emit_c(demo(), templates=tmp_path)


def test_folder_without_templates_is_refused(tmp_path):
    with pytest.raises(Refused, match="holds no folder c"):
        emit_c(demo(), templates=tmp_path)


def test_self_test_stores_what_the_simulator_gives():
    program = demo()
    text = emit_c(program)["skiff_selftest.c"]
    tables = [
        [int(code) for code in re.findall(r"-?\d+", table)]
        for table in re.findall(r"_t skiff_\w+\[\d+\] = \{(.*?)\};", text, re.DOTALL)
    ]
    inputs, expected = tables
    assert len(inputs) == len(expected) == 128
    for start in range(0, 128, 32):
        assert simulate(program, inputs[start : start + 32]).tolist() == expected[start : start + 32]
    assert any(inputs[:32])
    assert len({tuple(inputs[start : start + 32]) for start in range(0, 128, 32)}) == 4


@pytest.mark.parametrize(
    ("value", "bits", "text"),
    [
        (5, 32, "INT32_C(5)"),
        (-5, 64, "-INT64_C(5)"),
        (2**31 - 1, 32, "INT32_C(2147483647)"),
        (-(2**31), 32, "(-INT32_C(2147483647) - 1)"),
        (-(2**63), 64, "(-INT64_C(9223372036854775807) - 1)"),
    ],
)
def test_integer_literals(value, bits, text):
    assert integer(value, bits) == text


@pytest.mark.parametrize(
    ("value", "text"),
    [
        (fmpq(10000), "10000"),
        (fmpq(1, 8), "0.125"),
        (fmpq(-401, 20), "-20.05"),
        (fmpq(0), "0"),
        (fmpq(1, 3), "about 0.333333333"),
        (fmpq(1, 2**200), "about 6.22301528e-61"),
        (fmpq(10**40), "about 1e+40"),
    ],
)
def test_decimals(value, text):
    assert decimal(value) == text


def test_containers():
    assert [container_bits(bits) for bits in (2, 8, 9, 12, 16, 17, 32, 33, 64)] == [8, 8, 16, 16, 16, 32, 32, 64, 64]
