"""``afterkick targets``."""

from pathlib import Path

import click
from attrs import asdict

from afterkick.cli.common import HOLDS, json_option, print_json, reported, targets_option
from afterkick.report.text import targets_text
from afterkick.targets import load_targets

__all__ = ["command"]


@click.command("targets", help="List the target profiles.")
@targets_option
@json_option
def command(targets: Path | None, as_json: bool) -> None:
    """One line a profile."""
    with reported("targets") as codes:
        profiles = load_targets(targets)
        codes.append(HOLDS)
        if as_json:
            print_json({"targets": [asdict(profile) for profile in profiles.values()]})
        else:
            click.echo(targets_text(profiles.values()))
    raise SystemExit(max(codes))
