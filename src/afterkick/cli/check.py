"""``afterkick check DESIGN...``."""

from pathlib import Path
from typing import Any

import click

from afterkick.cli.common import FALLS_SHORT, HOLDS, json_option, load, print_json, reported, targets_option
from afterkick.report.data import check_data
from afterkick.report.text import check_text
from afterkick.verdict import assess

__all__ = ["command"]


@click.command("check", help="Run the whole road on each DESIGN and judge its budget.")
@click.argument("designs", metavar="DESIGN...", nargs=-1, required=True, type=click.Path(path_type=Path))
@targets_option
@json_option
def command(designs: tuple[Path, ...], targets: Path | None, as_json: bool) -> None:
    """Several designs: the highest exit code counts, and ``--json`` wraps the objects in ``designs``."""
    exit_code = HOLDS
    objects: list[dict[str, Any]] = []
    texts: list[str] = []
    for path in designs:
        with reported(str(path)) as codes:
            found = assess(load(path, targets))
            codes.append(HOLDS if found.verdict == "holds" else FALLS_SHORT)
            objects.append(check_data(found)) if as_json else texts.append(check_text(found))
        exit_code = max(exit_code, *codes)
    if texts:
        click.echo(("\n" + "-" * 100 + "\n").join(texts))
    if as_json and objects:
        print_json(objects[0] if len(designs) == 1 else {"designs": objects})
    raise SystemExit(exit_code)
