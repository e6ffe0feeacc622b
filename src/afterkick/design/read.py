"""Text of a design file -> Design, or all of its problems at once.

cattrs dispatches on the annotated types of the schema and gathers errors with their paths.  Three of its hooks are our
own: limited values, tables told apart by a tag, and tables, because the rules between keys must also be judged in a
table in which some other key is wrong.
"""

import re
from collections.abc import Callable, Iterator
from decimal import Decimal, InvalidOperation
from functools import cache
from tomllib import TOMLDecodeError, loads
from types import SimpleNamespace
from typing import Annotated, Any

import attrs
from cattrs import Converter
from cattrs.errors import (
    AttributeValidationNote,
    BaseValidationError,
    ClassValidationError,
    IterableValidationError,
    IterableValidationNote,
)
from flint import fmpq

from afterkick.design.limits import (
    Choice,
    Items,
    ListLimit,
    Polynomial,
    Unreadable,
    ValueLimit,
    Wrong,
    describe,
    exact_number,
    nearest,
    visible,
)
from afterkick.design.rules import RULES
from afterkick.design.schema import BLOCK_TYPES, INSTEAD, MODEL_FORMS, Block, Design, ModelForm
from afterkick.errors import Problem, Refused

__all__ = ["read_design"]

LONGEST_DESIGN = 200_000
LONGEST_NUMBER = 1000


def read_design(text: str, source: str = "design") -> Design:
    """Read a design file (TOML 1.0) whose content is ``text``; touches no disk.

    Key paths count the items of a list from 0: ``model.block[2]`` is the third block.

    :param source: what to call the file where a problem has no key.
    :raises Refused: with every problem of the file, each with its key path.
    """
    document = _parse(text, source)
    try:
        return _converter().structure(document, Design)
    except BaseValidationError as error:
        raise Refused(_problems(error, "")) from None


def _parse(text: str, source: str) -> dict[str, Any]:
    def refused(found: str, accepted: str, remedy: str) -> Refused:
        return Refused(Problem(source, found, accepted, remedy))

    if len(text) > LONGEST_DESIGN:
        raise refused(
            f"{len(text)} characters", f"a design file of at most {LONGEST_DESIGN}", "check the path: this is no design"
        )
    text = text.removeprefix("\ufeff")  # some editors put a byte-order mark in front
    try:
        return loads(text, parse_float=_exact_decimal)
    except TOMLDecodeError as error:
        lines = text.split("\n")
        end = f"at line {len(lines)}, column {len(lines[-1]) + 1}, the end of the text"
        raise refused(
            f"no valid TOML: {str(error).replace('at end of document', end)}",
            "TOML 1.0",
            "correct this place: text goes in double quotes, lists in [ ], and each key is written once",
        ) from None
    except RecursionError:
        raise refused("lists or tables nested too deeply", "lists nested at most two deep", "remove brackets") from None
    except ValueError:  # Python refuses to read integers of thousands of digits, and doesn't say where
        before = text[: match.start()] if (match := re.search(r"[0-9_]{1000}", text)) else text
        line = before.count("\n") + 1
        raise refused(
            f"an integer of thousands of digits at line {line}", "numbers of at most 400 digits", "shorten it"
        ) from None


def _exact_decimal(text: str) -> Decimal | Unreadable:
    if len(text) > LONGEST_NUMBER:
        return Unreadable(text)
    try:
        return Decimal(text)
    except InvalidOperation:  # an exponent beyond what even decimals can hold
        return Unreadable(text)


def _problems(error: Exception, path: str) -> Iterator[Problem]:
    """Walk the tree of cattrs' errors; their notes are the steps of the path."""
    match error:
        case Wrong():
            yield Problem(path, error.found, error.accepted, error.remedy)
        case ClassValidationError() | IterableValidationError():
            with_steps, without = error.group_exceptions()
            for cause, note in with_steps:
                yield from _problems(cause, path + _step(note, at_start=not path))
            for cause in without:
                yield from _problems(cause, path)
        case _:
            raise error


def _step(note: AttributeValidationNote | IterableValidationNote, at_start: bool) -> str:
    if isinstance(note, IterableValidationNote):
        return f"[{note.index}]"
    return note.name if at_start else f".{note.name}"


@cache
def _converter() -> Converter:
    converter = Converter()
    hook = converter.register_structure_hook
    hook(fmpq, lambda raw, _: exact_number(raw))
    hook(int, lambda raw, _: _integer(raw))
    hook(str, lambda raw, _: _of_type(raw, str, "a text", "write it in double quotes"))
    hook(bool, lambda raw, _: _of_type(raw, bool, "true or false", "write it without quotes"))
    hook(bool | int, lambda raw, _: _of_type(raw, int, "true or false or an integer", "write it without quotes"))
    converter.register_structure_hook_factory(attrs.has, lambda table: _table_hook(converter, table))
    converter.register_structure_hook_func(
        lambda kind: hasattr(kind, "__metadata__"), lambda raw, kind: _limited(converter, raw, kind)
    )
    for union, key, tables in ((ModelForm, "kind", MODEL_FORMS), (Block, "type", BLOCK_TYPES)):
        hook(union, _tagged_hook(converter, key, tables))
    return converter


def _of_type(raw: object, kind: type, accepted: str, remedy: str) -> Any:
    if not isinstance(raw, kind):
        raise Wrong(describe(raw), accepted, remedy)
    return raw


def _integer(raw: object) -> int:
    match raw:
        case bool():
            pass
        case int():
            return raw
        case Decimal() if raw.is_finite() and raw.adjusted() < 9 and raw == int(raw):
            raise Wrong(describe(raw), "an integer", f"write {int(raw)}")
    raise Wrong(describe(raw), "an integer", "write one integer, without quotes, point or exponent")


def _limited(converter: Converter, raw: Any, kind: Any) -> Any:
    """A value or a list whose annotation carries a limit."""
    limit: ValueLimit | ListLimit = kind.__metadata__[0]
    if isinstance(limit, Items | Polynomial):
        return _limited_list(converter, raw, kind.__origin__, limit)
    try:
        value = converter.structure(raw, kind.__origin__)
    except Wrong as error:
        if kind.__origin__ is fmpq:  # what numbers are too large or not finite is the same everywhere
            raise
        raise Wrong(error.found, limit.accepted, error.remedy) from None
    limit.check(value)
    return value


def _limited_list(converter: Converter, raw: Any, kind: Any, limit: ListLimit) -> Any:
    limit.check_length(raw)
    errors: list[Exception] = []
    try:
        limit.check_first(raw[0] if raw else None)
    except Wrong as error:
        errors.append(error)
    try:
        value = converter.structure(raw, kind)
    except IterableValidationError as error:
        errors.extend(error.exceptions)
    if errors:
        raise IterableValidationError("items", errors, list)
    return value


def _tagged_hook(converter: Converter, key: str, tables: dict[str, type]) -> Callable[[Any, Any], Any]:
    """A table whose ``key`` says which of ``tables`` it is."""
    names = Choice(tuple(tables))
    name_type: Any = Annotated[str, names]

    def read(raw: Any, _: Any) -> Any:
        table = _as_table(raw)
        try:
            if key not in table:
                meant = nearest(key, table)
                remedy = f"rename {_readable(meant)} to {key}" if meant else f"add {key} = ..."
                raise Wrong("missing", names.accepted, remedy)
            tag = converter.structure(table[key], name_type)
        except Wrong as error:
            raise ClassValidationError("tag", [_at(key, error)], dict) from None
        return converter.structure({name: value for name, value in table.items() if name != key}, tables[tag])

    return read


def _as_table(raw: Any) -> dict[str, Any]:
    if not isinstance(raw, dict):
        raise Wrong(describe(raw), "a table", "write its name once in single brackets, and its keys below")
    return raw


def _at(key: str, error: Exception) -> Exception:
    error.add_note(AttributeValidationNote(key, _readable(key), None))
    return error


def _readable(key: str) -> str:
    """A key path as it is; any other text quoted and cut."""
    return key if re.fullmatch(r"[A-Za-z0-9_.\[\]-]{1,60}", key) else visible(key)


class _TableErrors(ClassValidationError):
    """What is wrong in a table, and what could be read of it all the same."""

    reading: SimpleNamespace


def _table_hook(converter: Converter, table: type) -> Callable[[Any, Any], Any]:
    """Read the keys of a table one by one, then judge the rules between them."""
    fields = attrs.fields(table)
    instead = {field.metadata[INSTEAD][0]: field for field in fields if INSTEAD in field.metadata}
    known = {field.name: field for field in fields} | instead
    rule = RULES.get(table)

    def read(raw: Any, _: Any) -> Any:
        written = _as_table(raw)
        errors: list[Exception] = []
        values: dict[str, Any] = {}
        partial: dict[str, Any] = dict.fromkeys(field.name for field in fields)
        given: set[str] = set()
        misspelt: set[str] = set()
        for key, value in written.items():
            if key not in known:
                meant = nearest(key, [name for name in known if name not in written])
                if meant:
                    misspelt.add(known[meant].name)
                remedy = f"did you mean {meant}?" if meant else f"remove {_readable(key)}"
                errors.append(_at(key, Wrong("an unknown key", "only " + ", ".join(known), remedy)))
                continue
            field = known[key]
            given.add(field.name)
            if key in instead and field.name in written:
                only_one = f"exactly one of {field.name} and {key}"
                errors.append(_at(key, Wrong(f"both {field.name} and {key}", only_one, "remove one of them")))
                continue
            try:
                read_value = converter.structure(value, field.type)
            except (Wrong, BaseValidationError) as error:
                errors.append(_at(key, error))
                partial[field.name] = getattr(error, "reading", None)
                continue
            values[field.name] = field.metadata[INSTEAD][1](read_value) if key in instead else read_value
        for field in fields:
            if field.name in given | misspelt:
                continue
            if field.default is attrs.NOTHING:
                errors.append(_at(field.name, _missing(field)))
            else:
                partial[field.name] = field.default
        reading = SimpleNamespace(**partial | values)
        for flaw in rule(reading, given | misspelt) if rule else ():
            if flaw.where not in misspelt:  # that key has had its message
                errors.append(_at(flaw.where, Wrong(flaw.found, flaw.accepted, flaw.remedy)))
        if errors:
            refusal = _TableErrors("keys", errors, table)
            refusal.reading = reading
            raise refusal
        return table(**values)

    return read


def _missing(field: Any) -> Wrong:
    if not hasattr(field.type, "__metadata__"):
        return Wrong("missing", "a table", f"add a table [{field.name}]")
    keys = [field.name, field.metadata[INSTEAD][0]] if INSTEAD in field.metadata else [field.name]
    return Wrong("missing", field.type.__metadata__[0].accepted, " or ".join(f"add {key} = ..." for key in keys))
