"""C of relaxed filters of every structure against the simulation of the same filters unrelaxed; and what it says."""

import re
import shutil
import subprocess

import numpy as np
import pytest
from attrs import evolve

from afterkick.bench import compare_on_host
from afterkick.design.schema import Arithmetic
from afterkick.emit import emit_c
from afterkick.errors import Refused
from afterkick.fixed import Program, simulate
from afterkick.fixed.carry import with_carry
from afterkick.fixed.ranges import require_valid
from afterkick.fixed.relax import Relaxation, relax
from afterkick.fixed.structures import candidates
from afterkick.fixed.worst_case import WorstCase
from emit.test_c_against_simulator import build, call, driver
from fixed.carried_designs import codes_within, promising, transposed
from fixed.random_designs import program_of
from fixed.structure_designs import BUILD, HALF, ROOMY, at

ROUNDINGS = ("nearest", "floor", "even")


def relaxations() -> list[Relaxation]:
    """Every structure with and without error feedback, three filters each, all roundings and 8 to 32 bits of data."""
    found = []
    for structure in BUILD:
        for k, model in enumerate(("low-pass 2", "band-stop 4", "lead-lag")):
            for carry in (0, 1, 2):
                data_bits = (16, 12, 8, 24, 32)[(len(found) + k) % 5]
                arithmetic = Arithmetic(
                    structure=structure,
                    data_bits=data_bits,
                    coefficient_bits=12 if structure in ("direct", "transposed") else 16,
                    carry=carry,
                    rounding=ROUNDINGS[(k + carry) % 3],
                    relax=True,
                )
                signals = ROOMY if len(found) % 2 else evolve(HALF, output=ROOMY.output)
                try:
                    (one,) = candidates(at(model, 20), arithmetic, signals, "probe")
                except Refused:  # too few bits for the structure
                    continue
                assert one.relaxation is not None
                assert one.program is not None
                assert one.program.proof is not None
                name = f"relaxed{len(found)}"
                found.append(
                    Relaxation(evolve(one.relaxation.before, name=name), evolve(one.program, name=name)),
                )
    return found


@pytest.mark.parametrize("compiler", ["gcc", "zig cc"])
def test_same_integers_as_without_relaxing(compiler, tmp_path):
    """Within the promised peak, to which steps, squares and noise are cut; without any undefined behaviour."""
    if compiler == "gcc" and shutil.which(compiler) is None:
        pytest.skip("no gcc here; the compiler of the wheel is always used")
    listed = relaxations()
    assert len(listed) >= 36
    assert {one.before.structure for one in listed} == set(BUILD)
    assert sum(bool(one.folded) for one in listed) >= 4
    assert sum(bool(one.narrowed) for one in listed) >= 4
    inputs = [codes_within(one.before, seed) for seed, one in enumerate(listed)]
    answers = answered(compiler, [one.after for one in listed], inputs, tmp_path)
    for one, codes, (stepped, run, verdict) in zip(listed, inputs, answers, strict=True):
        expected = simulate(one.before, codes)
        assert (stepped == expected).all(), one.before.name
        assert (run == expected).all(), one.before.name
        assert verdict == -1, one.before.name


def answered(compiler, programs, inputs, folder):
    """For each program what its steps and its runs over blocks gave, and its self-test."""
    for program in programs:
        for name, text in emit_c(program).items():
            (folder / name).write_text(text, encoding="ascii")
    (folder / "driver.c").write_text(driver(programs, [len(codes) for codes in inputs]))
    build(compiler, folder)
    output = call(["./probe"], folder, input=np.concatenate(inputs).astype(np.int32).tobytes())
    answers = np.frombuffer(output, dtype=np.int32)
    for codes in inputs:
        stepped, run, (verdict,) = np.split(answers[: 2 * len(codes) + 1], [len(codes), 2 * len(codes)])
        answers = answers[2 * len(codes) + 1 :]
        yield stepped, run, verdict


def folded(peak_code: int = 2500) -> Program:
    before = promising(with_carry(transposed((3000, 6000, 3000), (16384, -25559, 10486), 14), 1), peak_code)
    return relax(before, WorstCase(before).ranges)


def test_the_caution_is_true(tmp_path):
    """A step ten times as high as the promised peak overflows a sum, which the sanitizer stops; the peak does not."""
    program = folded()
    for name, text in emit_c(program).items():
        (tmp_path / name).write_text(text, encoding="ascii")
    (tmp_path / "driver.c").write_text(driver([program], [100]))
    build("zig cc", tmp_path)
    for code, stops in ((2500, False), (25000, True)):
        codes = np.full(100, code, dtype=np.int32).tobytes()
        done = subprocess.run(["./probe"], cwd=tmp_path, input=codes, capture_output=True, check=False, timeout=60)
        assert (done.returncode != 0) == stops
    codes = [25000] * 100
    plain = promising(with_carry(transposed((3000, 6000, 3000), (16384, -25559, 10486), 14), 1), 2500)
    assert simulate(plain, codes)[-1] == 32767


def plain_text(text: str) -> str:
    return " ".join(text.replace("*", " ").split())


def test_what_the_files_say():
    program = folded()
    files = emit_c(program)
    caution = "CAUTION, relaxed: input codes must be from -2500 to 2500, and the memory must start from probe_reset."
    for name in ("probe.h", "probe.c"):
        text = plain_text(files[name].split("*/")[0])
        assert caution in text
        assert "a sum may overflow then, which is undefined behaviour in C" in text
    header = plain_text(files["probe.h"])
    assert header.index("CAUTION") < header.index("The filter:")
    assert "The code must be from -2500 to 2500; others are undefined behaviour, and nothing checks for them." in header
    assert "A result beyond its word that has no proved range below saturates" in header
    assert "relax = true." in header
    assert program.proof is not None
    for entry in program.proof.ranges:
        assert f"{entry.word}: {entry.lowest} to {entry.highest}; the word holds" in header
    unrelaxed = emit_c(program_of(([0.3, 0.3], [-0.4])))
    assert not any(word in text for text in unrelaxed.values() for word in ("CAUTION", "relax", "Proved"))


@pytest.mark.parametrize("peak_code", [4, 7, 8, 1000, 1023, 1024, 1025, 2500])
def test_the_self_test_stays_within_the_promised_peak(peak_code):
    """The stored codes reach the peak, and the generated ones come within a factor of two of it."""
    source = emit_c(folded(peak_code))["probe_selftest.c"]
    table = re.search(r"selftest_input\[\d+\] = \{(.*?)\};", source, flags=re.DOTALL)
    assert table is not None
    codes = [int(text) for text in re.findall(r"-?\d+", table[1])]
    assert (min(codes), max(codes)) == (-peak_code, peak_code)
    found = re.search(r"code <= UINT32_C\((\d+)\)", source)
    assert found is not None
    highest = int(found[1])
    assert highest + 1 <= peak_code < 2 * (highest + 1)


def test_a_proof_that_claims_too_much_is_never_emitted():
    """Ranges that are too small: the simulator refuses the first run that leaves them, and so the self-test's."""
    program = folded()
    require_valid(program)
    assert program.proof is not None
    worst = codes_within(program, 0)
    for k, entry in enumerate(program.proof.ranges):
        ranges = list(program.proof.ranges)
        ranges[k] = evolve(entry, lowest=entry.lowest // 8, highest=entry.highest // 8)
        false = evolve(program, proof=evolve(program.proof, ranges=tuple(ranges)))
        with pytest.raises(Refused, match=f"{entry.word} leaves the range"):
            simulate(false, worst)
        with pytest.raises(Refused, match=f"{entry.word} leaves the range"):
            emit_c(false)


def test_the_comparison_with_the_simulator_stays_within_the_peak():
    program = folded()
    assert compare_on_host(emit_c(program), program, 512).equal
