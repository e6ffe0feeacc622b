"""What the self-tests of integers and of singles share: the stimuli, and the figures of the templates."""

from collections.abc import Sequence
from typing import ClassVar, TypeVar

from attrs import frozen

from afterkick.emit.symbols import Symbols

__all__ = ["BLOCK", "LONG_RUN", "PART", "WORD", "StimuliView", "generated", "loud_parts", "rows", "unsigned"]

PART = 32
"""Samples of each stored stimulus; the filter is reset before each."""
LONG_RUN = 1024
BLOCK = 16
"""Samples that the long run hands to NAME_run at a time, in place."""
SEED = 1
MULTIPLIER = 1664525
INCREMENT = 1013904223
"""A full-period linear congruential generator modulo 2^32 (the parameters are common practice)."""
WORD = 1 << 32

Sample = TypeVar("Sample")


def unsigned(value: int) -> str:
    """A C literal of 32 bits."""
    return f"UINT32_C({value})"


@frozen
class StimuliView:
    """What the templates of either self-test place."""

    part: ClassVar[int] = PART
    long_run: ClassVar[int] = LONG_RUN
    long_blocks: ClassVar[int] = LONG_RUN // BLOCK
    block: ClassVar[int] = BLOCK
    seed: ClassVar[str] = unsigned(SEED)
    multiplier: ClassVar[str] = unsigned(MULTIPLIER)
    increment: ClassVar[str] = unsigned(INCREMENT)
    symbols: Symbols
    header_banner: tuple[str, ...]
    source_banner: tuple[str, ...]
    samples: int
    input_rows: tuple[str, ...]
    expected_rows: tuple[str, ...]


def generated(bits: int, count: int) -> list[int]:
    """The ``bits`` highest bits of the generator's first numbers."""
    codes, seed = [], SEED
    for _ in range(count):
        seed = (seed * MULTIPLIER + INCREMENT) % WORD
        codes.append(seed >> (32 - bits))
    return codes


def loud_parts(lowest: Sample, zero: Sample, highest: Sample) -> list[list[Sample]]:
    """Impulse, step, full-scale alternation in blocks that excite slow sections too."""
    impulse = [highest] + [zero] * (PART - 1)
    step = [lowest] * PART
    alternation = [highest if (n & 1) == 0 else lowest for n in range(PART // 2)]
    alternation += [highest if (n & 4) == 0 else lowest for n in range(PART // 2)]
    return [impulse, step, alternation]


def rows(texts: Sequence[str], per_line: int) -> tuple[str, ...]:
    """Initialisers, a few a line."""
    return tuple(", ".join(texts[i : i + per_line]) + "," for i in range(0, len(texts), per_line))
