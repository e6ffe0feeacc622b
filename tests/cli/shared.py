"""What the tests of the commands share: designs as text, and a run with its exit code and both streams."""

import json
from collections.abc import Sequence
from pathlib import Path
from typing import Any

from click.testing import CliRunner, Result

from afterkick.cli import main

__all__ = ["LAG", "design_text", "json_of", "lag_with", "ratio", "refused", "run", "write"]


def ratio(numerator: Sequence[object], denominator: Sequence[object]) -> str:
    """The lines of a [model] table."""
    top, bottom = (", ".join(map(str, numbers)) for numbers in (numerator, denominator))
    return f'kind = "ratio"\nnumerator = [{top}]\ndenominator = [{bottom}]'


def design_text(model: str, method: str = "zero-order-hold", rate_hz: object = 1000, more: str = "") -> str:
    """A design file with the lines of its model, and further tables."""
    sampling = f'[sampling]\nrate_hz = {rate_hz}\nmethod = "{method}"'
    return f'[design]\nname = "probe"\n[model]\n{model}\n{sampling}\n{more}\n'


def lag_with(more: str) -> str:
    """The lag 50/(s + 50) with further tables."""
    return design_text(ratio([50], [1, 50]), more=more)


LAG = lag_with("[budget]\nimpulse_peak_percent = 90")
"""Holds."""


def write(folder: Path, text: str, name: str = "probe.toml") -> str:
    path = folder / name
    path.write_text(text, encoding="utf-8")
    return str(path)


def run(*arguments: str) -> Result:
    """The command, in this process; an exception other than an exit is a failure."""
    result = CliRunner().invoke(main, arguments)
    if result.exception is not None and not isinstance(result.exception, SystemExit):
        raise result.exception
    return result


def json_of(result: Result) -> dict[str, Any]:
    """The one object on standard output, without NaN and infinities."""

    def no_constant(name: str) -> None:
        raise AssertionError(f"{name} in JSON")

    data = json.loads(result.stdout, parse_constant=no_constant)
    assert isinstance(data, dict)
    return data


def refused(result: Result) -> str:
    """The messages of a refusal: exit code 2, nothing on standard output, what is accepted and a remedy in each."""
    assert result.exit_code == 2, result.output
    assert result.stdout == ""
    lines = result.stderr.splitlines()
    assert lines
    for line in lines:
        assert "; accepted: " in line, line
        assert "; remedy: " in line, line
    return result.stderr
