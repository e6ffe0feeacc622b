"""The design file: typed schema, reading with every problem at once, digest."""

from afterkick.design.digest import canonical_text, digest
from afterkick.design.read import read_design
from afterkick.design.schema import Design

__all__ = ["Design", "canonical_text", "digest", "read_design"]
