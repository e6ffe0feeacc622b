"""``afterkick new NAME``."""

import os
from pathlib import Path

import click

from afterkick.cli.common import HOLDS, reported, write_all
from afterkick.errors import Problem, Refused
from afterkick.starters import STARTERS, starter_text

__all__ = ["command"]

_KINDS = "; ".join(f"{name}: {what}" for name, what in STARTERS.items())


@click.command("new", help=f"Write NAME.toml, a commented starter design. Starters: {_KINDS}.")
@click.argument("name")
@click.option("--starter", type=click.Choice(list(STARTERS)), default="slam", show_default=True)
@click.option(
    "-o", "--output", "folder", type=click.Path(path_type=Path), default=Path("."), help="Folder to write to."
)
def command(name: str, starter: str, folder: Path) -> None:
    """Never overwrites."""
    with reported("new") as codes:
        text = starter_text(starter, name)
        path = folder / f"{name}.toml"
        if os.path.lexists(path):
            raise Refused(Problem(str(path), "a file that exists", "a new file", "choose another name or folder"))
        write_all(folder, {path.name: text})
        click.echo(f"wrote {path}; next: afterkick check {path}", err=True)
        codes.append(HOLDS)
    raise SystemExit(max(codes))
