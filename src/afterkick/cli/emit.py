"""``afterkick emit DESIGN -o DIR``."""

from pathlib import Path

import click

from afterkick.cli.common import HOLDS, json_option, load, print_json, reported, targets_option, write_all
from afterkick.emit import emit_c
from afterkick.report.notes import emitted_notes
from afterkick.verdict import assess

__all__ = ["command"]


@click.command("emit", help="Write the C of DESIGN: filter, header and self-test.")
@click.argument("design", type=click.Path(path_type=Path))
@click.option("-o", "--output", "folder", required=True, type=click.Path(path_type=Path), help="Folder to write to.")
@click.option("--templates", type=click.Path(path_type=Path), help="A folder of your own templates, used first.")
@targets_option
@json_option
def command(design: Path, folder: Path, templates: Path | None, targets: Path | None, as_json: bool) -> None:
    """Writes whatever the verdict: judging is what ``check`` is for.  The verdict is said, though."""
    with reported(str(design)) as codes:
        found = assess(load(design, targets))
        files = emit_c(found.realisation.program, notes=emitted_notes(found), templates=templates)
        write_all(folder, files)
        codes.append(HOLDS)
        if as_json:
            print_json(
                {
                    "design": found.design.design.name,
                    "digest": found.digest,
                    "verdict": found.verdict,
                    "folder": str(folder),
                    "files": list(files),
                }
            )
        else:
            click.echo(f"wrote {', '.join(files)} to {folder}; verdict of the budget: {found.verdict}", err=True)
    raise SystemExit(max(codes))
