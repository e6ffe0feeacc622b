"""Instructions, stack and bytes against what can be counted by hand, and against a second way of counting."""

import numpy as np
import pytest

from afterkick.bench.core import EmulatedFilter
from afterkick.bench.cores import find_core
from afterkick.bench.cross import cross_compile
from afterkick.bench.harness import Harness
from afterkick.bench.stimuli import bench_stimuli
from afterkick.emit import emit_c
from afterkick.fixed import simulate
from afterkick.fixed.ranges import Interval
from afterkick.targets import find_target
from bench.shared import CORES, gain_program, on, random_kind


def emulated(core: str, program, files: dict[str, str] | None = None) -> EmulatedFilter:
    profile, harness = find_target(core), Harness.of(program)
    emulator = find_core(profile.emulator.core)
    return EmulatedFilter(cross_compile(files or emit_c(program), harness, profile, None, emulator), harness, emulator)


@pytest.mark.parametrize("core", CORES)
def test_a_wire_takes_a_move_and_a_return(core):
    """y = x: the value goes from the register of the second argument to that of the result (the calling conventions
    of both families), and back to the caller."""
    found = on(core, gain_program())
    assert found.equal
    step = found.instructions.step
    assert (step.lowest, step.mean, step.highest) == (2, 2, 2)
    assert found.bytes.stack == 0 or found.instructions.run.mean > 2  # the block's loop may save registers
    assert found.bytes.helpers == {}
    assert found.bytes.constants == 0


def skipped_instructions(filtered: EmulatedFilter, places: list[int]) -> int:
    """Those that a condition left out: after an IT instruction one to four belong to it, the number by the lowest bit
    of its mask that is set (Arm v7-M Architecture Reference Manual, A7.7.38)."""
    skipped = 0
    for number, place in enumerate(places):
        code = int.from_bytes(filtered._uc.mem_read(place, 2), "little")
        if code >> 8 == 0xBF and code & 0xF:
            following, after = [], place + 2
            for _ in range({8: 1, 4: 2, 2: 3, 1: 4}[code & -code & 0xF]):
                following.append(after)
                first = int.from_bytes(filtered._uc.mem_read(after, 2), "little")
                after += 4 if first >= 0xE800 else 2
            skipped += len(set(following) - set(places[number + 1 : number + 1 + len(following)]))
    return skipped


@pytest.mark.parametrize("kind", ["direct", "coupled", "float32"])
@pytest.mark.parametrize("core", CORES)
def test_counts_equal_those_of_a_hook_on_every_instruction(core, kind):
    import unicorn

    program = random_kind(kind, 2)
    filtered = emulated(core, program)
    inputs = bench_stimuli(program, 160, 5)[6].inputs
    inputs = np.concatenate([inputs] * 8)[:64]
    filtered.reset()
    counted = filtered.counted_runs(inputs.reshape(1, 64))
    seen = []
    filtered.reset()
    filtered._uc.ctl_flush_tb()
    hook = filtered._uc.hook_add(unicorn.UC_HOOK_CODE, lambda _, address, size, __: seen.append((address, size)))
    filtered.run(inputs, in_place=True)
    filtered._uc.hook_del(hook)
    places = [address for address, _ in seen]
    skipped = skipped_instructions(filtered, places) if core.startswith("armv7") else 0
    assert counted.instructions.tolist() == [len(seen) + skipped]
    assert bool(counted.helpers) == any(
        one.address in places for one in filtered.image.functions if not one.name.startswith(program.name)
    )


@pytest.mark.parametrize("core", CORES)
def test_the_stack_is_what_is_pushed(core):
    """A step that calls itself so often keeps a word of its own for every call."""
    program = gain_program()
    files = emit_c(program)
    deep = (
        "static int deep(volatile int *up, int n);\n"
        "static int deep(volatile int *up, int n)\n{\n"
        "    volatile int mine = *up + n;\n"
        "    return (n > 0) ? deep(&mine, n - 1) + mine : mine;\n}\n"
        "int16_t plain_step(plain_state *state, int16_t x)\n{\n    volatile int zero = 0; (void)deep(&zero, NUMBER);\n"
    )
    head = "int16_t plain_step(plain_state *state, int16_t x)\n{\n"
    depths = []
    for number in (10, 20, 40):
        text = files["plain.c"].replace(head, deep.replace("NUMBER", str(number)))
        assert text != files["plain.c"]
        filtered = emulated(core, program, {**files, "plain.c": text})
        depths.append(filtered.counted_steps(np.arange(4)).stack_bytes)
    assert depths[1] - depths[0] == (depths[2] - depths[1]) / 2
    assert depths[1] - depths[0] >= 40
    assert depths[1] - depths[0] <= 10 * 64


def test_long_inputs_go_through_in_parts():
    program = random_kind("direct", 1)
    filtered = emulated("armv7e-m", program)
    inputs = np.tile(bench_stimuli(program, 1600, 1)[0].inputs, 700)[:70_000]
    filtered.reset()
    assert (filtered.steps(inputs) == simulate(program, inputs)).all()


def test_stimuli_stay_within_what_the_code_takes_and_are_as_many_as_asked():
    program = random_kind("relaxed", 0)
    (proved,) = [one for one in program.proof.ranges if one.word == program.input] or [
        Interval(-program.proof.peak_code, program.proof.peak_code)
    ]
    stimuli = bench_stimuli(program, 5000, 3)
    assert sum(one.inputs.size for one in stimuli) >= 5000
    assert min(one.inputs.min() for one in stimuli) >= proved.lowest
    assert max(one.inputs.max() for one in stimuli) <= proved.highest
    assert max(one.inputs.max() for one in stimuli) >= proved.highest - 1
    assert all((one.inputs[-one.inputs.size // 4 + 1 :] == 0).all() for one in stimuli if one.start is None)


def test_the_attaining_stimulus_reaches_the_absolute_sum():
    """It must drive the output to the sum of the magnitudes of the pulse response, up to the roundings."""
    program = random_kind("direct", 6)
    stimuli = {one.name: one for one in bench_stimuli(program, 16_000, 1)}
    loud = stimuli["impulse"].inputs.size * 3 // 4
    reached = np.abs(stimuli["attaining input"].expected).max()
    others = max(np.abs(one.expected).max() for name, one in stimuli.items() if "attaining" not in name)
    absolute_sum = np.abs(stimuli["impulse"].expected[:loud]).sum()
    ends = program.output_ends
    assert reached >= min(0.95 * absolute_sum, ends[1])
    assert reached >= 0.99 * others


def test_the_same_seed_gives_the_same_stimuli():
    program = random_kind("preset", 2)
    first, again, other = (bench_stimuli(program, 4000, seed) for seed in (4, 4, 5))
    assert [one.name for one in first] == [one.name for one in again]
    assert all((one.inputs == two.inputs).all() for one, two in zip(first, again, strict=True))
    assert any((one.inputs != two.inputs).any() for one, two in zip(first, other, strict=True))
    assert sum(one.start is not None for one in first) == 8
