"""``afterkick tour``."""

from time import monotonic
from typing import Any

import click
from attrs import asdict

from afterkick.bench import compare_on_host
from afterkick.cli.common import FALLS_SHORT, HOLDS, json_option, print_json, reported
from afterkick.design import read_design
from afterkick.emit import emit_c
from afterkick.errors import Lacking
from afterkick.report.notes import emitted_notes
from afterkick.report.text import tour_text
from afterkick.starters import STARTERS, starter_text
from afterkick.verdict import assess

__all__ = ["command"]

_SAMPLES = 4096
_CAUTION = (
    "These designs are invented. Before a filter moves a rudder or guards a motor, verify it on the real hardware;\n"
    "local codes and licensed practice come first."
)


@click.command("tour", help="The whole road on the demo designs: model, sampling, integers, C, compiled and compared.")
@json_option
def command(as_json: bool) -> None:
    """Writes nothing but a temporary folder for the compiler."""
    stops: list[dict[str, Any]] = []
    exit_code = HOLDS
    for k, (starter, shows) in enumerate(STARTERS.items(), start=1):
        click.echo(f"[{k}/{len(STARTERS)}] {starter}: {shows}", err=True)
        with reported(starter) as codes:
            stop, text = _stop(starter, shows)
            stops.append(stop)
            codes.append(HOLDS if stop["verdict"] == "holds" and stop["equal"] else FALLS_SHORT)
            if not as_json:
                click.echo(text)
            if stop["lacking"]:
                raise Lacking(stop["lacking"])
        exit_code = max(exit_code, *codes)
    if as_json:
        print_json({"stops": stops})
    else:
        click.echo(f"{_CAUTION}\nNext: afterkick new NAME, then afterkick check NAME.toml")
    raise SystemExit(exit_code)


def _stop(starter: str, shows: str) -> tuple[dict[str, Any], str]:
    start = monotonic()
    found = assess(read_design(starter_text(starter)))
    files = emit_c(found.realisation.program, notes=emitted_notes(found))
    stop: dict[str, Any] = {
        "design": starter,
        "shows": shows,
        "verdict": found.verdict,
        "c_lines": sum(text.count("\n") for text in files.values()),
        "samples": _SAMPLES,
        "equal": None,
        "compiler": None,
        "lacking": None,
    }
    try:
        stop |= asdict(compare_on_host(files, found.realisation.program, _SAMPLES))
    except Lacking as error:
        stop["lacking"] = str(error)
    return stop, tour_text(found, stop, monotonic() - start)
