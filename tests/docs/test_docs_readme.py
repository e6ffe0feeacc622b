"""The README against the program: its commands are run, its reference is compared with the schema."""

import os
import subprocess
import sys
from importlib import import_module
from itertools import pairwise
from typing import Annotated, get_args, get_origin

import attrs
import click
import pytest

from afterkick.bench.compilers import find_compiler
from afterkick.cli import main
from afterkick.design import schema
from afterkick.design.limits import Choice
from docs.markdown import TOP, blocks, document, names, section, tables

UPDATE = "AFTERKICK_UPDATE_GOLDEN"
README = document("README.md")
KEY_TABLES = {
    "### `[design]`": schema.Identity,
    "### `[sampling]`": schema.Sampling,
    "### `[signals]`": schema.Signal,
    "### `[arithmetic]`": schema.Arithmetic,
    "### `[target]`": schema.Target,
    "### `[budget]`": schema.Budget,
}
DEFAULTS_IN_WORDS = {"title": "the name", "unit": "none"}


def run(script, folder):
    """What a block prints on both streams, run by bash in ``folder`` with the package that is under test."""
    environment = {**os.environ, "PYTHONIOENCODING": "utf-8", "AFTERKICK_PYTHON": sys.executable}
    prepared = f'afterkick() {{ "$AFTERKICK_PYTHON" -m afterkick "$@"; }}\n{script}'
    done = subprocess.run(
        ["bash", "-uo", "pipefail", "-c", prepared],
        cwd=folder,
        env=environment,
        stdin=subprocess.DEVNULL,
        stdout=subprocess.PIPE,
        stderr=subprocess.STDOUT,
        text=True,
        encoding="utf-8",
        timeout=120,
        check=False,
    )
    assert done.returncode == 0, done.stdout
    return done.stdout


def test_walkthrough(tmp_path):
    """Each runnable block is followed by exactly what it prints; the C in between compiles with what was emitted."""
    listed = blocks(README)
    updated = README
    shown = 0
    for block, answer in pairwise(listed):
        if block.info != "sh runnable":
            continue
        assert answer.info == "text", "a runnable block without what it prints"
        printed = run(block.body, tmp_path)
        shown += 1
        if os.environ.get(UPDATE):
            updated = updated.replace(
                f"```sh runnable\n{block.body}```\n\n```text\n{answer.body}```",
                f"```sh runnable\n{block.body}```\n\n```text\n{printed}```",
            )
        else:
            assert printed == answer.body, f"if the change is meant: {UPDATE}=1 python -m pytest {__file__}"
    assert shown >= 6
    if os.environ.get(UPDATE):
        (TOP / "README.md").write_text(updated, encoding="utf-8")
    (example,) = [block.body for block in listed if block.info == "c"]
    (tmp_path / "generated" / "example.c").write_text(example, encoding="ascii")
    command = [*find_compiler(), "-std=c99", "-Wall", "-Wextra", "-Wpedantic", "-Wconversion", "-Werror"]
    subprocess.run([*command, "-fsyntax-only", "example.c"], cwd=tmp_path / "generated", check=True, timeout=120)


@pytest.mark.parametrize("heading", KEY_TABLES)
def test_every_key_with_its_default(heading):
    fields = {field.name: field for field in attrs.fields(KEY_TABLES[heading])}
    instead = [field.metadata[schema.INSTEAD][0] for field in fields.values() if schema.INSTEAD in field.metadata]
    rows = {names(row[0])[0]: row for row in tables(section(README, heading))[0]}
    assert sorted(rows) == sorted([*fields, *instead])
    for key, field in fields.items():
        if field.default is attrs.NOTHING:
            assert rows[key][1] == "required"
        elif key in DEFAULTS_IN_WORDS:
            assert rows[key][1] == DEFAULTS_IN_WORDS[key]
        elif field.default is not None:
            text = str(field.default).lower() if isinstance(field.default, bool) else f"{field.default}"
            assert rows[key][1].strip('`"') == text


def test_every_form_of_the_model():
    rows = {names(row[0])[0]: names(row[1]) for row in tables(section(README, "### `[model]`"))[0]}
    assert {kind: set(keys) for kind, keys in rows.items()} == {
        kind: {field.name for field in attrs.fields(form)} for kind, form in schema.MODEL_FORMS.items()
    }


def test_every_block_type():
    rows = {names(row[0])[0]: row[1] for row in tables(section(README, "### `[[model.block]]`"))[0]}
    assert list(rows) == list(schema.BLOCK_TYPES)
    for kind, block in schema.BLOCK_TYPES.items():
        assert names(rows[kind]) == [field.name for field in attrs.fields(block)], kind
        for field in attrs.fields(block):
            optional = field.default is not attrs.NOTHING and block is not schema.Lag  # which takes exactly one
            assert (f"(`{field.name}`)" in rows[kind]) == optional, f"{kind}: {field.name}"


def test_every_family_and_method():
    families = tables(section(README, "### `[[model.block]]`"))[1]
    assert [names(row[0])[0] for row in families] == list(schema.FAMILIES)
    methods = tables(section(README, "## Sampling methods"))[0]
    assert [names(row[0])[0] for row in methods] == list(schema.METHODS)


def choices():
    listed = [*KEY_TABLES.values(), *schema.MODEL_FORMS.values(), *schema.BLOCK_TYPES.values()]
    for table in listed:
        for field in attrs.fields(table):
            kinds = [field.type, *get_args(field.type)]
            for limit in (kind.__metadata__[0] for kind in kinds if get_origin(kind) is Annotated):
                if isinstance(limit, Choice):
                    yield field.name, limit.names


def test_every_choice_of_a_key():
    listed = dict(choices())
    assert {"method", "first_sample", "structure", "scaling", "accumulator_bits", "family", "unit"} <= set(listed)
    written = set(names(section(README, "## The design file") + section(README, "## Sampling methods")))
    written |= {"32", "64"} if " 32 or 64 " in section(README, "### `[arithmetic]`") else set()
    for key, accepted in listed.items():
        assert {str(name) for name in accepted} <= written, key


def test_every_command_with_its_options():
    rows = {names(row[0])[0].split()[1]: row for row in tables(section(README, "## Commands"))[0]}
    context = click.Context(main)
    assert list(rows) == main.list_commands(context)
    for name, row in rows.items():
        for parameter in import_module(f"afterkick.cli.{name}").command.params:
            if isinstance(parameter, click.Option):
                assert any(f"`{option}" in " ".join(row) or f" {option} " in row[0] for option in parameter.opts), name


def test_set_up_is_one_line_each():
    commands = {block.info: block.body for block in blocks(section(README, "## Set up"))}
    assert list(commands) == ["sh tour", "sh tests"]
    assert all(body.count("\n") == 1 for body in commands.values())
