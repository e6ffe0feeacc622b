"""The emitted C on each emulated core against the simulator, integer for integer: programs of every kind.

The compiler of the ziglang wheel and the emulator are dependencies of the tests: without them these tests fail.
``AFTERKICK_BENCH=FIRST:COUNT`` runs COUNT seeds from FIRST on; the default is 0:1, the full run 0:32 (more than 1,000
programs, some hours).
"""

import os

import pytest

from bench.shared import CORES, KINDS, on, random_kind

VARIABLE = "AFTERKICK_BENCH"
FIRST, COUNT = (int(part) for part in os.environ.get(VARIABLE, "0:1").split(":"))


@pytest.mark.parametrize("kind", KINDS)
@pytest.mark.parametrize("core", CORES)
@pytest.mark.parametrize("seed", range(FIRST, FIRST + COUNT))
def test_random_programs(core, kind, seed):
    # another program for each core, so that a run sees many
    number = len(CORES) * seed + CORES.index(core)
    program = random_kind(kind, number)
    found = on(core, program, seed=seed)
    again = f"alone: {VARIABLE}={seed}:1 python -m pytest {__file__} -k '{core} and {kind}'"
    assert found.equal, f"{program.structure if kind != 'float32' else kind}: {found.first_difference}; {again}"
    assert found.selftest == -1
    assert found.samples >= 3000
    assert found.instructions.step.lowest > 0
    assert found.instructions.run.lowest > 0
    assert found.bytes.code > 0
    assert found.bytes.stack >= 0


@pytest.mark.parametrize("kind", KINDS)
def test_random_programs_on_this_machine(kind):
    found = on("host", random_kind(kind, 7))
    assert found.equal, found.first_difference
    assert found.instructions is None
