"""What the bench feeds to a filter: each stimulus within the input codes that the emitted code takes."""

from typing import TYPE_CHECKING, Any

import numpy as np
from attrs import frozen
from numpy.typing import NDArray

from afterkick.emit.promise import accepted_codes
from afterkick.fixed.program import Program
from afterkick.fixed.simulate import preset_state, trace
from afterkick.numbers import nearest_float

if TYPE_CHECKING:
    from afterkick.floating import FloatProgram

__all__ = ["Stimulus", "bench_stimuli", "simulated"]

SHAPES = 16
"""From a reset."""
PRESETS = 8
PRESET_SAMPLES = 240


@frozen(eq=False)
class Stimulus:
    """Samples for a filter, and what must come of them."""

    name: str
    start: tuple[int, int] | None
    """Input code and wanted output code of a preset; None: from a reset."""
    inputs: NDArray[Any]
    expected: NDArray[Any]
    """What the simulator gives."""
    state: dict[str, Any]
    """Each state word after the last sample, from the simulator."""


def bench_stimuli(program: "Program | FloatProgram", samples: int, seed: int) -> tuple[Stimulus, ...]:
    """At least ``samples`` samples in all; the same for the same seed.

    From a reset, with silence in the last quarter: impulses, steps, the input that drives the output furthest, noise
    and squares between the ends, small signals.  For a program with a preset, starts from it as well.
    """
    draw = np.random.default_rng(seed)
    limits = _limits(program)
    starts = _presets(program, draw) if isinstance(program, Program) and program.preset is not None else []
    left = samples - sum(stimulus.inputs.size for stimulus in starts)
    columns = _shapes(program, limits, max(-(-left // SHAPES), 8), draw)
    outputs, states = simulated(program, np.stack(list(columns.values()), axis=1), None)
    resets = [
        Stimulus(name, None, column, outputs[:, k], {word: values[k] for word, values in states.items()})
        for k, (name, column) in enumerate(columns.items())
    ]
    return (*resets, *starts)


def simulated(
    program: "Program | FloatProgram", inputs: NDArray[Any], state: dict[str, Any] | None
) -> tuple[NDArray[Any], dict[str, Any]]:
    """Outputs, and the state after the last sample, for inputs of shape (n,) or (n, m) from a state or a reset."""
    if isinstance(program, Program):
        codes = trace(program, inputs, state)
        return codes.outputs, codes.state
    from afterkick.floating.simulate import float_trace  # fixed point pays nothing for it

    singles = float_trace(program, inputs, state)
    return singles.outputs, singles.state


def _limits(program: "Program | FloatProgram") -> tuple[Any, Any]:
    """The least and the largest input that the emitted code takes, or that is promised for singles."""
    if isinstance(program, Program):
        codes = accepted_codes(program)
        return codes.lowest, codes.highest
    peak = np.float32(nearest_float(program.input_format.peak))
    return -peak, peak


def _shapes(
    program: "Program | FloatProgram", limits: tuple[Any, Any], length: int, draw: np.random.Generator
) -> dict[str, NDArray[Any]]:
    lowest, highest = limits
    kind: Any = np.int64 if isinstance(program, Program) else np.float32
    loud = length - length // 4
    n = np.arange(loud)

    def noise(part: int) -> Any:
        if kind is np.int64:
            return draw.integers(lowest // part, highest // part, loud, endpoint=True)
        return draw.uniform(lowest, highest, loud).astype(np.float32) / np.float32(part)

    def ends(high: NDArray[Any]) -> Any:
        return np.where(high, highest, lowest)

    least = 1 if kind is np.int64 else highest * np.float32(2.0**-20)
    kick = np.where(n == 0, highest, 0 * highest)
    response, _ = simulated(program, kick.astype(kind), None)
    period = int(draw.integers(3, 64, endpoint=True))
    shapes = {
        "impulse": kick,
        "negative impulse": np.where(n == 0, lowest, 0 * lowest),
        "step": np.full(loud, highest),
        "negative step": np.full(loud, lowest),
        "attaining input": ends(response[::-1] >= 0),
        "negative attaining input": ends(response[::-1] < 0),
        "noise 1": noise(1),
        "noise 2": noise(1),
        "noise 3": noise(1),
        "noise between the ends": ends(draw.integers(0, 2, loud) > 0),
        "square of two samples": ends(n % 2 == 0),
        f"square of {period} samples": ends(n % period < period / 2),
        "slow square": ends(n % max(loud // 4, 2) < loud // 8),
        "noise of an eighth": noise(8),
        "smallest step": np.full(loud, least),
        "smallest negative step": np.full(loud, -least),
    }
    silence = np.zeros(length - loud)
    return {name: np.concatenate([shape, silence]).astype(kind) for name, shape in shapes.items()}


def _presets(program: Program, draw: np.random.Generator) -> list[Stimulus]:
    """The input stays for a third, then is noise, then silence."""
    assert program.preset is not None
    lowest, highest = _limits(program)
    found = []
    for k in range(PRESETS):
        code = int(draw.integers(lowest, highest, endpoint=True)) // (1 if k % 2 else 8)
        wanted = int(draw.integers(*program.output_ends, endpoint=True))
        noise = draw.integers(lowest, highest, PRESET_SAMPLES // 3, endpoint=True)
        third = np.ones(PRESET_SAMPLES // 3, dtype=np.int64)
        inputs = np.concatenate([code * third, noise, 0 * third])
        outputs, state = simulated(program, inputs, preset_state(program, code, wanted))
        found.append(Stimulus(f"preset {k + 1}", (code, wanted), inputs, outputs, state))
    return found
