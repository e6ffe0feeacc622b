"""Target profiles: what a core can do, and how to compile for it.

A profile is a file NAME.toml in ``targets``; a folder of the user's own adds profiles or replaces some by name.
"""

import tomllib
from collections.abc import Iterator
from pathlib import Path
from typing import Any

from attrs import Attribute, fields, frozen

from afterkick.design.limits import nearest
from afterkick.errors import Problem, Refused
from afterkick.resources import resource_folder

__all__ = ["Compiler", "Emulator", "TargetProfile", "find_target", "load_targets"]


@frozen
class Compiler:
    """How to compile for the core with ``python -m ziglang cc``."""

    target: str
    """The value of ``-target``; empty for the machine this runs on."""
    flags: tuple[str, ...]


@frozen
class Emulator:
    """What runs the compiled code on the machine this runs on."""

    core: str
    """The emulated core; empty where none is at hand."""


@frozen
class TargetProfile:
    """A core, as far as the choice of words and the emitted C depend on it."""

    name: str
    """The stem of the file; not a key in it."""
    title: str
    core: str
    word_bits: int
    """Of a register."""
    int_bits: int
    """Of the C type int."""
    multipliers: tuple[str, ...]
    """Products and multiply-adds that are one instruction, for example "16x16=32"; empty where there is none."""
    accumulator_bits: tuple[int, ...]
    """Widths in which sums cost a few instructions at most."""
    saturates: bool
    """Whether an instruction clips to a word."""
    floats: bool
    """Whether there is single-precision arithmetic."""
    compiler: Compiler
    emulator: Emulator


def load_targets(extra_folder: Path | None = None) -> dict[str, TargetProfile]:
    """All profiles by name, in alphabetical order.

    :raises Refused: with every problem of every profile, or where ``extra_folder`` is no folder.
    """
    folders = [resource_folder("targets")]
    if extra_folder is not None:
        if not extra_folder.is_dir():
            found = f"{extra_folder} is no folder"
            raise Refused(Problem("targets", found, "a folder with NAME.toml files", "correct the path"))
        folders.append(extra_folder)
    profiles: dict[str, TargetProfile] = {}
    problems: list[Problem] = []
    for folder in folders:
        for path in sorted(folder.glob("*.toml")):
            try:
                profiles[path.stem] = read_profile(path)
            except Refused as refusal:
                problems += refusal.problems
    if problems:
        raise Refused(problems)
    return dict(sorted(profiles.items()))


def find_target(name: str, extra_folder: Path | None = None) -> TargetProfile:
    """The profile of that name.

    :raises Refused: where there is none, naming those there are.
    """
    profiles = load_targets(extra_folder)
    if name in profiles:
        return profiles[name]
    near = nearest(name, profiles)
    remedy = f'did you mean "{near}"?' if near else "add a profile of your own"
    raise Refused(Problem("target.name", f'unknown target "{name}"', ", ".join(profiles), remedy))


def read_profile(path: Path) -> TargetProfile:
    """One file as a profile.

    :raises Refused: with every problem of the file.
    """
    try:
        table = tomllib.loads(path.read_text(encoding="utf-8"))
    except (OSError, UnicodeDecodeError, tomllib.TOMLDecodeError) as error:
        raise Refused(Problem(str(path), f"can't be read: {error}", "a TOML file", "correct the file")) from error
    problems = list(_table_problems(table, TargetProfile, f"{path.name}: ", skip="name"))
    if problems:
        raise Refused(problems)
    compiler, emulator = table.pop("compiler"), table.pop("emulator")
    values: dict[str, Any] = {key: tuple(value) if isinstance(value, list) else value for key, value in table.items()}
    return TargetProfile(
        name=path.stem,
        compiler=Compiler(compiler["target"], tuple(compiler["flags"])),
        emulator=Emulator(emulator["core"]),
        **values,
    )


PLAIN: dict[Any, tuple[type, str]] = {
    str: (str, "a string"),
    int: (int, "a positive integer"),
    bool: (bool, "true or false"),
}
LISTS: dict[Any, tuple[type, str]] = {
    tuple[str, ...]: (str, "a list of strings"),
    tuple[int, ...]: (int, "a list of positive integers"),
}
TABLES = (Compiler, Emulator)


def _table_problems(table: dict[str, Any], schema: Any, where: str, skip: str = "") -> Iterator[Problem]:
    """Unknown keys, missing keys and wrong types, in that order."""
    known: dict[str, Attribute[Any]] = {field.name: field for field in fields(schema) if field.name != skip}
    for key in table:
        if key not in known:
            near = nearest(key, known)
            remedy = f"did you mean {near}?" if near else "remove it"
            yield Problem(f"{where}{key}", "unknown key", ", ".join(known), remedy)
    for key, field in known.items():
        if key not in table:
            yield Problem(f"{where}{key}", "missing", _accepted(field.type), f"add {key}")
        elif field.type in TABLES and isinstance(table[key], dict):
            yield from _table_problems(table[key], field.type, f"{where}{key}.")
        elif not _fits(table[key], field.type):
            yield Problem(f"{where}{key}", f"found {table[key]!r}", _accepted(field.type), f"correct {key}")


def _accepted(kind: Any) -> str:
    return (PLAIN | LISTS)[kind][1] if kind in PLAIN or kind in LISTS else "a table"


def _fits(value: Any, kind: Any) -> bool:
    if kind in LISTS:
        return isinstance(value, list) and all(_fits(item, LISTS[kind][0]) for item in value)
    if kind not in PLAIN:
        return False
    # bool is a subclass of int, but true is no width
    return type(value) is PLAIN[kind][0] and (not isinstance(value, int) or kind is bool or value > 0)
