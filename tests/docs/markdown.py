"""The few parts of Markdown that the tests of the documents read."""

import re
from pathlib import Path

from attrs import frozen

TOP = Path(__file__).parents[2]
FENCE = re.compile(r"^```(?P<info>[^\n`]*)\n(?P<body>.*?)^```$", flags=re.MULTILINE | re.DOTALL)


@frozen
class Block:
    """A fenced block: what follows the opening fence, and the lines."""

    info: str
    body: str


def document(name: str) -> str:
    return (TOP / name).read_text(encoding="utf-8")


def blocks(text: str) -> list[Block]:
    return [Block(found["info"], found["body"]) for found in FENCE.finditer(text)]


def section(text: str, heading: str) -> str:
    """What stands below a heading, down to the next one of its level or above."""
    level = len(heading) - len(heading.lstrip("#"))
    found = re.search(rf"^{re.escape(heading)}$(.*?)(?=^#{{1,{level}}} |\Z)", text, flags=re.MULTILINE | re.DOTALL)
    assert found, f"no heading {heading}"
    return found[1]


def tables(text: str) -> list[list[list[str]]]:
    """The tables as rows of cells, without the two lines of each table's head."""
    found = re.findall(r"(?:^\|.*\|$\n?)+", text, flags=re.MULTILINE)
    return [[[cell.strip() for cell in line[1:-1].split("|")] for line in table.splitlines()[2:]] for table in found]


def names(cell: str) -> list[str]:
    """What stands in backticks, without double quotes."""
    return [name.strip('"') for name in re.findall(r"`([^`]+)`", cell)]
