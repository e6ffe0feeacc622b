"""What would make the proof of the word ranges go through, where that is a matter of scale."""

from collections.abc import Iterable
from math import isfinite

from afterkick.fixed.program import Program
from afterkick.fixed.worst_case import WordRange
from afterkick.numbers import nearest_float

__all__ = ["scale_remedies"]

ROOM = 1.001
"""What a remedy leaves for roundings."""


def scale_remedies(overflowing: Iterable[WordRange], program: Program) -> list[str]:
    """In words; an estimate, to four digits."""
    remedies: list[str] = []
    for entry in overflowing:
        if not isfinite(entry.filling):
            continue
        if entry.word == program.output:
            needed = nearest_float(program.output_format.full_scale) * entry.filling * ROOM
            size = f"{needed:.4g} {program.output_format.unit}".rstrip()
            remedies.append(f"an output full_scale of {size} or more, or a smaller peak")
        elif not remedies:
            peak = nearest_float(program.input_format.peak) / entry.filling / ROOM
            size = f"{peak:.4g} {program.input_format.unit}".rstrip()
            remedies.append(f"for {entry.word} an input peak of {size} or less")
    return remedies
