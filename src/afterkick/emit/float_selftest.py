"""The self-test of a filter in single precision: stored stimuli and a longer run, compared value by value.

Whether a compiler fuses or widens can't be asked of it portably, so the test measures it: equal, near, or wrong.
"""

import numpy as np
from attrs import frozen

from afterkick.emit.banner import selftest_banner
from afterkick.emit.float_literals import single
from afterkick.emit.stimuli import BLOCK, LONG_RUN, PART, StimuliView, generated, loud_parts, rows
from afterkick.emit.symbols import Symbols
from afterkick.emit.text import harmless
from afterkick.errors import Problem, Refused
from afterkick.floating.program import FloatProgram
from afterkick.floating.simulate import float_trace, simulate_float

__all__ = ["FloatSelfTestView", "float_selftest_view"]

NOISE_BITS = 16
PER_LINE = 5
ALLOWED = 8
"""How much farther than the simulator's own roundings lead from exact arithmetic another rounding may lead."""


@frozen
class FloatSelfTestView(StimuliView):
    """What the self-test's templates place."""

    long_rows: tuple[str, ...]
    """The last sample of each block of the long run."""
    last: int
    """The index of a block's last sample."""
    noise_scale: str
    tolerance: str
    unit: str


def float_selftest_view(program: FloatProgram, symbols: Symbols) -> FloatSelfTestView:
    """Stimuli and what must come out.

    :raises Refused: for a filter that overflows within the promised peak.
    """
    format_ = program.input_format
    peak = np.float32(int(format_.peak.numerator) / int(format_.peak.denominator))
    scale = peak / np.float32(1 << (NOISE_BITS - 1))
    quiet = _noise(PART, scale / np.float32(8))
    parts = [np.array(part) for part in (*loud_parts(-peak, np.float32(0), peak), quiet)]
    noise = _noise(LONG_RUN, scale)
    expected = np.concatenate([simulate_float(program, part) for part in parts])
    long_run = simulate_float(program, noise)
    if not (np.isfinite(expected).all() and np.isfinite(long_run).all()):
        found = f"outputs beyond the largest single within {LONG_RUN} samples of the promised peak"
        remedy = "a stable filter, or other units for the input or output"
        raise Refused(Problem("arithmetic.kind", found, "outputs below 2^128", remedy))
    return FloatSelfTestView(
        symbols=symbols,
        header_banner=selftest_banner(program, ".h"),
        source_banner=selftest_banner(program, ".c"),
        samples=expected.size,
        input_rows=_rows(np.concatenate(parts)),
        expected_rows=_rows(expected),
        long_rows=_rows(long_run[BLOCK - 1 :: BLOCK]),
        last=BLOCK - 1,
        noise_scale=single(float(scale)),
        tolerance=single(_tolerance(program, [*parts, noise])),
        unit=harmless(program.output_format.unit),
    )


def _noise(count: int, scale: np.float32) -> np.ndarray:
    """Singles within the peak from the highest 16 bits of the generator, one rounding each."""
    codes = np.array(generated(NOISE_BITS, count)) - (1 << (NOISE_BITS - 1))
    return codes.astype(np.float32) * scale


def _tolerance(program: FloatProgram, stimuli: list[np.ndarray]) -> float:
    """A few times what the roundings do to these stimuli, and at least some last places of the largest output."""
    difference = largest = 0.0
    for stimulus in stimuli:
        exact = float_trace(program, stimulus, precision=np.float64).outputs
        difference = max(difference, float(np.max(np.abs(simulate_float(program, stimulus) - exact))))
        largest = max(largest, float(np.max(np.abs(exact))))
    return ALLOWED * max(difference, 2.0**-24 * largest)


def _rows(values: np.ndarray) -> tuple[str, ...]:
    return rows([single(float(value)) for value in values], PER_LINE)
