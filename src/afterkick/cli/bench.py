"""``afterkick bench DESIGN``."""

from pathlib import Path

import click

from afterkick.bench import bench
from afterkick.bench.compilers import named_compiler
from afterkick.cli.common import FALLS_SHORT, HOLDS, json_option, load, print_json, reported, targets_option
from afterkick.emit import emit_c
from afterkick.errors import Lacking
from afterkick.numbers import fraction
from afterkick.report.bench import bench_data, bench_text, instructions_line
from afterkick.report.notes import emitted_notes
from afterkick.targets import find_target
from afterkick.verdict import assess

__all__ = ["command"]


@click.command("bench", help="Compile the C of DESIGN for its target, run it on an emulated core, compare and count.")
@click.argument("design", type=click.Path(path_type=Path))
@click.option("--target", help="Another profile than the design names.")
@click.option("--cc", help="A compiler of your own with its options, in the place of those of the profile.")
@click.option("--samples", type=click.IntRange(1_000, 10_000_000), default=100_000, show_default=True)
@click.option("--seed", type=click.IntRange(0, 2**32 - 1), default=1, show_default=True, help="Of the noise.")
@targets_option
@json_option
def command(
    design: Path, target: str | None, cc: str | None, samples: int, seed: int, targets: Path | None, as_json: bool
) -> None:
    """Judges the budget line ``instructions``, and no other."""
    with reported(str(design)) as codes:
        described = load(design, targets)
        profile = find_target(target or described.target.name, targets)
        command = None if cc is None else named_compiler(cc, "--cc")
        assessed = assess(described)
        program = assessed.realisation.program
        files = emit_c(program, notes=emitted_notes(assessed))
        found = bench(files, program, profile, command=command, samples=samples, seed=seed)
        limit = described.budget.instructions
        line = instructions_line(None if limit is None else float(fraction(limit)), found)
        if as_json:
            print_json(bench_data(described.design.name, found, line))
        else:
            click.echo(bench_text(described.design.name, found, line))
        if found.lacking:
            raise Lacking(found.lacking)
        codes.append(HOLDS if found.equal and (line is None or line.holds) else FALLS_SHORT)
    raise SystemExit(max(codes))
