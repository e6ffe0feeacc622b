"""A rendering of a design's values that comments, spacing and the spelling of numbers in the file don't change."""

from collections.abc import Iterator
from typing import Any

import attrs
from flint import fmpq

from afterkick.design.schema import Design

__all__ = ["canonical_text", "digest"]


def canonical_text(design: Design) -> str:
    """One line ``path = value`` a value, in the order of the schema, plain ASCII; what is None is left out.

    Two designs have the same text exactly where they are equal: rationals are in lowest terms, texts are escaped.
    """
    return "".join(f"{line}\n" for line in _lines("", design))


def digest(design: Design) -> str:
    """SHA-256 of :func:`canonical_text`, 64 hexadecimal digits."""
    from hashlib import sha256  # only the writers need it

    return sha256(canonical_text(design).encode("ascii")).hexdigest()


def _lines(path: str, value: Any) -> Iterator[str]:
    match value:
        case None:
            return
        case fmpq():
            yield f"{path} = {int(value.numerator)}/{int(value.denominator)}"
        case bool() | int():
            yield f"{path} = {value}"
        case str():
            yield f"{path} = {value!a}"
        case tuple():
            yield f"{path} = list of {len(value)}"
            for index, item in enumerate(value):
                yield from _lines(f"{path}[{index}]", item)
        case _:
            tag = getattr(type(value), "kind", None) or getattr(type(value), "type", None)
            if isinstance(tag, str):  # a field of that name would be a slot's descriptor
                yield f"{path} is {tag}"
            for field in attrs.fields(type(value)):
                yield from _lines(f"{path}.{field.name}" if path else field.name, getattr(value, field.name))
