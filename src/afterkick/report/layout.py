"""Lines for a terminal: a label, then text that wraps where a reader would break it."""

import re
from collections.abc import Iterable

__all__ = ["LABEL", "WIDTH", "row"]

LABEL = 12
"""Columns of the label."""
WIDTH = 118
"""Columns of a line; only a single word or formula term that is longer goes beyond."""

_WORDS = re.compile(" ")
_TERMS = re.compile(r"(?<=[,;\]]) | (?=[+-] )")
"""After a comma, semicolon or unit, and before a sign: never within a term of a formula."""


def row(label: str, text: str, formula: bool = False) -> str:
    """The label and the text beside it, on as many lines as it takes."""
    lines = _filled((_TERMS if formula else _WORDS).split(text), WIDTH - LABEL)
    return "\n".join(f"{label if k == 0 else '':<{LABEL}}{line}" for k, line in enumerate(lines)).rstrip()


def _filled(parts: Iterable[str], width: int) -> list[str]:
    lines: list[str] = []
    for part in parts:
        if lines and len(lines[-1]) + 1 + len(part) <= width:
            lines[-1] += f" {part}"
        else:
            lines.append(part)
    return lines
