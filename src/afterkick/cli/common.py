"""What the commands share: reading a design, reporting what is wrong, exit codes, writing files whole."""

import json
import os
import tempfile
from collections.abc import Iterator, Mapping
from contextlib import contextmanager, suppress
from errno import EISDIR
from pathlib import Path
from typing import Any

import click

from afterkick.design import Design, read_design
from afterkick.errors import Lacking, Problem, Refused, Uncertified
from afterkick.targets import find_target

__all__ = [
    "FALLS_SHORT",
    "HOLDS",
    "LACKING",
    "WRONG",
    "json_option",
    "load",
    "print_json",
    "reported",
    "targets_option",
    "write_all",
]

HOLDS, FALLS_SHORT, WRONG, LACKING = 0, 1, 2, 3

LARGEST_FILE = 1 << 20
"""Bytes; a design file is a page."""

json_option = click.option("--json", "as_json", is_flag=True, help="Print one JSON object and nothing else.")

targets_option = click.option(
    "--targets", type=click.Path(path_type=Path), help="A folder of your own target profiles as well."
)


def load(path: Path, targets: Path | None = None) -> Design:
    """The design in a file, whose target is known.

    :raises Refused: for a file that can't be read, and for what is wrong in it.
    """
    design = read_design(_text_of(path), str(path))
    find_target(design.target.name, targets)
    return design


def _text_of(path: Path) -> str:
    accepted = "a design file: UTF-8 text of at most 1 MiB"
    try:
        with path.open("rb") as file:
            content = file.read(LARGEST_FILE + 1)  # also of a device that never ends
        if len(content) > LARGEST_FILE:
            raise Refused(Problem("file", "more than 1 MiB", accepted, "check the path: this is no design"))
        text = content.decode("utf-8-sig")
    except OSError as error:
        raise Refused(Problem("file", error.strerror or str(error), accepted, "check the path")) from None
    except UnicodeDecodeError as error:
        found = f"a byte that is not UTF-8 at offset {error.start}"
        raise Refused(Problem("file", found, accepted, "save the file as UTF-8")) from None
    return text


@contextmanager
def reported(subject: str) -> Iterator[list[int]]:
    """Turns errors into messages on standard error; the list receives the exit code of what was caught."""
    codes: list[int] = []
    try:
        yield codes
    except Refused as refusal:
        for problem in refusal.problems:
            click.echo(f"{subject}: {problem}", err=True)
        codes.append(WRONG)
    except Uncertified as error:
        click.echo(f"{subject}: {error}", err=True)
        codes.append(WRONG)
    except Lacking as error:
        click.echo(f"{subject}: {error}", err=True)
        codes.append(LACKING)


def print_json(data: Mapping[str, Any]) -> None:
    """One object on standard output, in ASCII whatever the terminal takes; refuses what JSON has no word for."""
    click.echo(json.dumps(data, indent=2, allow_nan=False))


def write_all(folder: Path, files: Mapping[str, str]) -> None:
    """All files or none: written beside their places first, then moved.

    :raises Refused: where the folder or a file can't be written.
    """
    staged: list[tuple[str, Path]] = []
    created = [path for path in (folder, *folder.parents) if not path.exists()]
    try:
        folder.mkdir(parents=True, exist_ok=True)
        for name, text in files.items():
            if (folder / name).is_dir():
                raise IsADirectoryError(EISDIR, f"a folder is in the place of {name}")
            handle, temporary = tempfile.mkstemp(prefix=".afterkick-", dir=folder)
            staged.append((temporary, folder / name))
            with os.fdopen(handle, "w", encoding="utf-8", newline="\n") as file:
                file.write(text)
        for temporary, path in staged:
            os.chmod(temporary, 0o666 & ~_umask())
            os.replace(temporary, path)
    except BaseException as error:  # also where the user stops it
        for temporary, _ in staged:
            Path(temporary).unlink(missing_ok=True)
        for path in created:
            with suppress(OSError):
                path.rmdir()
        if not isinstance(error, OSError):
            raise
        found = error.strerror or str(error)
        raise Refused(Problem(str(folder), found, "a folder that can be written", "choose another -o")) from None


def _umask() -> int:
    mask = os.umask(0)
    os.umask(mask)
    return mask
