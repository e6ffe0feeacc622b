"""``afterkick kick DESIGN``."""

from decimal import Decimal, InvalidOperation
from pathlib import Path
from typing import TYPE_CHECKING

import click
from flint import fmpq

from afterkick.cli.common import HOLDS, json_option, load, print_json, reported, targets_option
from afterkick.design import Design
from afterkick.design.limits import visible
from afterkick.errors import Problem, Refused
from afterkick.fixed.program import Program
from afterkick.fixed.structures import build_program
from afterkick.model.forms import model_of
from afterkick.numbers import rational
from afterkick.report.data import kick_data
from afterkick.report.response import kick
from afterkick.report.text import kick_text
from afterkick.sampling import Sampled, sample
from afterkick.verdict import assess

if TYPE_CHECKING:
    from afterkick.floating import FloatProgram

__all__ = ["command"]


@click.command("kick", help="Print the impulse response of DESIGN: analytic, sampled, shipped.")
@click.argument("design", type=click.Path(path_type=Path))
@click.option("--samples", type=click.IntRange(1, 100_000), default=32, show_default=True, help="Rows to print.")
@click.option("--amplitude", help="Kick of the shipped filter, in input units; default: the promised peak.")
@targets_option
@json_option
def command(design: Path, samples: int, amplitude: str | None, targets: Path | None, as_json: bool) -> None:
    """The columns share one unit: output units per input unit and second."""
    with reported(str(design)) as codes:
        found = load(design, targets)
        model = model_of(found)
        sampled = sample(model, found.sampling)
        program = _program(found, sampled)
        size = found.signals.input.peak_or_full_scale if amplitude is None else _amplitude(amplitude)
        rows = kick(model, sampled, program, samples, size)
        if as_json:
            print_json(kick_data(found, rows))
        else:
            click.echo(kick_text(found, rows))
        codes.append(HOLDS)
    raise SystemExit(max(codes))


def _program(design: Design, sampled: Sampled) -> "Program | FloatProgram":
    """What ships, judged only where "auto" has to: what that takes depends on the budget."""
    arithmetic, signals, name = design.arithmetic, design.signals, design.design.name
    if arithmetic.kind == "float32":
        from afterkick.floating import float_program  # fixed point pays nothing for it

        return float_program(sampled, signals, name, flush_below=arithmetic.flush_below)
    if arithmetic.structure == "auto":
        return assess(design).realisation.program
    return build_program(sampled, arithmetic, signals, name)


def _amplitude(text: str) -> fmpq:
    try:
        value = Decimal(text)
        if value.is_finite() and abs(value.adjusted()) < 300 and value > 0:
            return rational(value)
    except InvalidOperation:
        pass
    accepted = "a positive decimal number, in input units"
    raise Refused(
        Problem("--amplitude", f"the text {visible(text)}", accepted, "leave it out: the promised peak is used")
    )
