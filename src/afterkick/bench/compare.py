"""Compiled code against the simulator on one stimulus: codes must be equal, and singles equal bit for bit."""

from typing import TYPE_CHECKING, Any

import numpy as np
from attrs import frozen
from numpy.typing import NDArray

from afterkick.bench.host import run_on_host
from afterkick.emit.promise import accepted_codes
from afterkick.fixed.program import Program
from afterkick.fixed.simulate import simulate
from afterkick.numbers import nearest_float

if TYPE_CHECKING:
    from afterkick.floating import FloatProgram

__all__ = ["Comparison", "compare_on_host"]


@frozen
class Comparison:
    """What came of it."""

    equal: bool
    """Whether all outputs are equal and the self-test holds."""
    compiler: str


def compare_on_host(files: dict[str, str], program: "Program | FloatProgram", samples: int) -> Comparison:
    """Compile the emitted files and filter a kick, a step and noise, all as large as the input may be.

    :raises Lacking: without a compiler.
    :raises Refused: where the compiler refuses the code, as it may with templates of the user's own.
    """
    inputs = _stimulus(program, samples)
    run = run_on_host(files, program, inputs)
    if isinstance(program, Program):
        expected: NDArray[Any] = simulate(program, inputs)
    else:
        from afterkick.floating import simulate_float  # fixed point pays nothing for it

        expected = simulate_float(program, inputs)
    # as bytes, since 0 and -0 compare as equal and a NaN as different from itself
    equal = run.outputs.dtype == expected.dtype and run.outputs.tobytes() == expected.tobytes()
    return Comparison(equal and run.selftest == -1, run.compiler)


def _stimulus(program: "Program | FloatProgram", samples: int) -> NDArray[Any]:
    noise = np.random.default_rng(1)
    if isinstance(program, Program):
        codes = accepted_codes(program)
        inputs: NDArray[Any] = noise.integers(codes.lowest, codes.highest, size=samples, endpoint=True)
        ends: tuple[float, float] = codes.lowest, codes.highest
    else:
        peak = nearest_float(program.input_format.peak)
        inputs = noise.uniform(-peak, peak, size=samples).astype(np.float32)
        ends = -peak, peak
    inputs[: samples // 4] = 0
    inputs[samples // 8 : samples // 4], inputs[0] = ends
    return inputs
