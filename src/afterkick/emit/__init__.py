"""A Program as text in a target language."""

from afterkick.emit.c import emit_c

__all__ = ["emit_c"]
