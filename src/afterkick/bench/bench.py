"""Emitted C on a core: bit for bit against the simulator, instructions counted, bytes measured."""

from collections.abc import Iterable, Iterator
from itertools import cycle
from typing import TYPE_CHECKING, Any

import numpy as np
from attrs import evolve, frozen
from numpy.typing import NDArray

from afterkick.bench.compilers import find_compiler
from afterkick.bench.core import Counts, EmulatedFilter, Fault, require_emulator
from afterkick.bench.cores import find_core
from afterkick.bench.cross import cross_compile
from afterkick.bench.filters import BenchFilter, HostFilter
from afterkick.bench.harness import Harness
from afterkick.bench.host import compile_on_host
from afterkick.bench.stimuli import Stimulus, bench_stimuli, simulated
from afterkick.fixed.program import Program, Role
from afterkick.fixed.simulate import preset_state
from afterkick.targets import TargetProfile

if TYPE_CHECKING:
    from afterkick.floating import FloatProgram

__all__ = ["BLOCK", "Bench", "Bytes", "Difference", "Instructions", "Spread", "WordDifference", "bench"]

BLOCK = 64
"""Samples a call of NAME_run for which instructions are counted."""
CALLS = (BLOCK, 1, 0, 7, BLOCK, 2, BLOCK, 33, BLOCK, 128)
"""Samples a call of NAME_run that outputs are compared for, over and over; every other call is in place."""
COUNTED_SAMPLES = 8192
"""That instructions are counted for, at most: it takes a hundred times as long as running them."""
CHUNK = 64
"""Samples that are looked at at once to find the first difference."""


@frozen
class Spread:
    """Instructions a sample, over all that were counted."""

    lowest: float
    mean: float
    highest: float


@frozen
class Instructions:
    """Counted on the emulated core, from the first instruction of a function to its return."""

    step: Spread
    """Of one call of NAME_step."""
    run: Spread
    """Of a sample in calls of NAME_run with ``BLOCK`` samples, each call spread evenly over its samples."""
    samples: int
    """That were counted of each."""


@frozen
class Bytes:
    """What the compiled NAME.c takes; None is not measured."""

    code: int | None
    constants: int | None
    state: int
    """Of the struct."""
    stack: int | None
    """The deepest that one call went."""
    helpers: dict[str, int] | None
    """Routines of the compiler's library that were called, with their sizes: not part of ``code``."""


@frozen
class WordDifference:
    """A state word that is not as the simulator has it."""

    section: int
    """1 for the first."""
    word: str
    expected: int | float
    found: int | float


@frozen
class Difference:
    """The first place where the core and the simulator part."""

    stimulus: str
    call: str
    """"step", "run" or "selftest"."""
    index: int | None
    """Of the first output that differs; None where only the memory does, or the code did not come back."""
    expected: int | float | None
    found: int | float | None
    after: int | None
    """Samples after which the memory was found to differ first: single ones for "step", whole calls for "run"."""
    words: tuple[WordDifference, ...]
    """Of the first section that differs then."""
    fault: str = ""
    """Why the code stopped."""


@frozen
class Bench:
    """What the bench found."""

    target: str
    compiler: str
    equal: bool | None
    """Whether all outputs and states are equal and the self-test holds; None where nothing was run."""
    samples: int
    """Of all stimuli; each went through single calls and through blocks."""
    selftest: int | None
    first_difference: Difference | None
    instructions: Instructions | None
    """None where nothing is counted."""
    bytes: Bytes
    lacking: str = ""
    """Why nothing was run."""


def bench(
    files: dict[str, str],
    program: "Program | FloatProgram",
    profile: TargetProfile,
    *,
    command: tuple[str, ...] | None = None,
    samples: int = 100_000,
    seed: int = 1,
) -> Bench:
    """Compile emitted files for a target and run them there.

    ``command`` is a compiler with its options, in the place of what the profile says.

    :raises Lacking: without a compiler, or what reads and runs its output.
    :raises Refused: where the compiler refuses the code, or makes none for this core.
    """
    harness = Harness.of(program)
    if not profile.compiler.target:
        return _on_host(files, program, profile, harness, command or find_compiler(), samples, seed)
    core = find_core(profile.emulator.core) if profile.emulator.core else None
    if core is not None:
        require_emulator()
    build = cross_compile(files, harness, profile, command, core)
    sizes = Bytes(build.code_bytes, build.constant_bytes, build.state_bytes, None, None)
    if core is None:
        reason = f"no emulator for {profile.name}: compiled, not run; --target host runs the same C on this machine"
        return Bench(profile.name, build.compiler, None, 0, None, None, None, sizes, reason)
    emulated = EmulatedFilter(build, harness, core)
    stimuli = bench_stimuli(program, samples, seed)
    found = _compared(emulated, program, stimuli, profile.name, build.compiler, sizes)
    if found.first_difference is not None and found.first_difference.fault:
        return found
    try:
        steps, runs = _counted(emulated, stimuli)
    except Fault as fault:
        difference = Difference("what is counted", "step and run", None, None, None, None, (), str(fault))
        return evolve(found, equal=False, first_difference=difference)
    calls = (steps.instructions, runs.instructions / BLOCK)
    step, run = (Spread(float(c.min()), float(c.mean()), float(c.max())) for c in calls)
    stack = max(steps.stack_bytes, runs.stack_bytes)
    helpers = {one.name: one.size for one in sorted(steps.helpers | runs.helpers, key=lambda one: one.name)}
    return evolve(
        found,
        instructions=Instructions(step, run, steps.instructions.size),
        bytes=evolve(sizes, stack=stack, helpers=helpers),
    )


def _on_host(
    files: dict[str, str],
    program: "Program | FloatProgram",
    profile: TargetProfile,
    harness: Harness,
    command: tuple[str, ...],
    samples: int,
    seed: int,
) -> Bench:
    with compile_on_host(files | {harness.file: harness.source}, program, command) as compiled:
        here = HostFilter(compiled.library, harness)
        sizes = Bytes(None, None, here.state_bytes, None, None)
        return _compared(here, program, bench_stimuli(program, samples, seed), profile.name, compiled.compiler, sizes)


def _compared(
    core: BenchFilter,
    program: "Program | FloatProgram",
    stimuli: tuple[Stimulus, ...],
    target: str,
    compiler: str,
    sizes: Bytes,
) -> Bench:
    """Every output and every final state of all stimuli, then the self-test; up to the first difference."""
    samples = sum(stimulus.inputs.size for stimulus in stimuli)
    difference, selftest = None, None
    try:
        selftest = core.selftest()
        if selftest != -1:
            difference = Difference("stored in the self-test", "selftest", selftest, None, None, None, ())
    except Fault as fault:
        difference = Difference("stored in the self-test", "selftest", None, None, None, None, (), str(fault))
    for stimulus in stimuli:
        for call in ("step", "run"):
            try:
                if _equal(core, stimulus, call):
                    continue
                found = _first_difference(core, program, stimulus, call)
            except Fault as fault:
                found = Difference(stimulus.name, call, None, None, None, None, (), str(fault))
            return Bench(target, compiler, False, samples, selftest, found, None, sizes)
    return Bench(target, compiler, difference is None, samples, selftest, difference, None, sizes)


def _start(core: BenchFilter, stimulus: Stimulus) -> None:
    if stimulus.start is None:
        core.reset()
    else:
        core.preset(*stimulus.start)


def _parts(call: str, inputs: NDArray[Any]) -> Iterator[tuple[int, int, bool]]:
    """Start and end of each call, and whether it is in place; single calls are taken together."""
    if call == "step":
        yield 0, inputs.size, False
        return
    done = 0
    for k, count in enumerate(cycle(CALLS)):
        if done >= inputs.size:
            return
        yield done, min(done + count, inputs.size), k % 2 == 0
        done += count


def _filtered(core: BenchFilter, call: str, samples: NDArray[Any], in_place: bool) -> NDArray[Any]:
    return core.steps(samples) if call == "step" else core.run(samples, in_place)


def _equal(core: BenchFilter, stimulus: Stimulus, call: str) -> bool:
    _start(core, stimulus)
    parts = [_filtered(core, call, stimulus.inputs[a:b], place) for a, b, place in _parts(call, stimulus.inputs)]
    return _same(np.concatenate(parts), stimulus.expected) and not any(_differing(core.state(), stimulus.state))


def _same(found: NDArray[Any], expected: NDArray[Any]) -> bool:
    """As bytes, since 0 and -0 compare as equal and a NaN as different from itself."""
    return expected.astype(found.dtype).tobytes() == found.tobytes()


def _differing(found: dict[str, Any], expected: dict[str, Any]) -> Iterable[str]:
    return (word for word, value in found.items() if not _same(np.array(value), np.array(expected[word])))


def _first_difference(
    core: BenchFilter, program: "Program | FloatProgram", stimulus: Stimulus, call: str
) -> Difference:
    """Once more: the first output, and the first look at the memory, that is not as the simulator has it."""
    _start(core, stimulus)
    parts = [_filtered(core, call, stimulus.inputs[a:b], place) for a, b, place in _parts(call, stimulus.inputs)]
    outputs, wanted = np.concatenate(parts), stimulus.expected.astype(parts[0].dtype)
    unequal = (n for n in range(outputs.size) if not _same(outputs[n], wanted[n]))
    index = next(unequal, None)
    expected, found = (None, None) if index is None else (wanted[index].item(), outputs[index].item())
    after, words = _memory_difference(core, program, stimulus, call)
    return Difference(stimulus.name, call, index, expected, found, after, words)


def _memory_difference(
    core: BenchFilter, program: "Program | FloatProgram", stimulus: Stimulus, call: str
) -> tuple[int | None, tuple[WordDifference, ...]]:
    """After how many samples the memory differs, looked at after every call, and in which words."""
    _start(core, stimulus)
    words: dict[str, Any] = {word.name: 0 for word in program.words if word.role is Role.STATE}
    if stimulus.start is not None:
        assert isinstance(program, Program)
        words = preset_state(program, *stimulus.start)
    if any(_differing(core.state(), words)):
        return 0, _words_that_differ(core, program, words)
    for start, end, in_place in _small_parts(call, stimulus.inputs):
        before = core.memory, words
        inputs = stimulus.inputs[start:end]
        _filtered(core, call, inputs, in_place)
        _, words = simulated(program, inputs, words)
        if not any(_differing(core.state(), words)):
            continue
        if call == "run":
            return end, _words_that_differ(core, program, words)
        core.memory, words = before
        for n in range(start, end):
            core.steps(stimulus.inputs[n : n + 1])
            _, words = simulated(program, stimulus.inputs[n : n + 1], words)
            if any(_differing(core.state(), words)):
                return n + 1, _words_that_differ(core, program, words)
    return None, ()


def _small_parts(call: str, inputs: NDArray[Any]) -> Iterator[tuple[int, int, bool]]:
    if call == "run":
        yield from _parts(call, inputs)
    else:
        for start in range(0, inputs.size, CHUNK):
            yield start, min(start + CHUNK, inputs.size), False


def _words_that_differ(
    core: BenchFilter, program: "Program | FloatProgram", expected: dict[str, Any]
) -> tuple[WordDifference, ...]:
    """Of the first section that has any."""
    found = core.state()
    differing = set(_differing(found, expected))
    sections = ([word.name for word in section.words] for section in program.sections)
    for number, names in enumerate(sections, start=1):
        listed = [word for word in names if word in differing]
        if listed:
            return tuple(
                WordDifference(number, word, np.array(expected[word]).item(), np.array(found[word]).item())
                for word in listed
            )
    return ()


def _counted(core: EmulatedFilter, stimuli: tuple[Stimulus, ...]) -> tuple[Counts, Counts]:
    """Some of each stimulus from a reset: of its loud part and of the silence behind it."""
    number = min(COUNTED_SAMPLES, sum(stimulus.inputs.size for stimulus in stimuli) // 4)
    each = max(number // len(stimuli) // (2 * BLOCK), 1) * BLOCK
    parts = [part for stimulus in stimuli for part in (stimulus.inputs[:each], stimulus.inputs[-each:])]
    samples = np.concatenate(parts)
    samples = samples[: samples.size // BLOCK * BLOCK]
    core.reset()
    steps = core.counted_steps(samples)
    core.reset()
    return steps, core.counted_runs(samples.reshape(-1, BLOCK))
