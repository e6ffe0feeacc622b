"""Text from a design file, made harmless for a C comment."""

import re
import textwrap

__all__ = ["comment_lines", "harmless"]

WIDTH = 110
# A comment's end or start, and the trigraph that becomes a backslash.
APART = re.compile(r"(?<=\*)(?=/)|(?<=/)(?=\*)|(?<=\?)(?=\?)")


def harmless(text: str) -> str:
    """The text in printable ASCII without backslash, comment mark or trigraph.

    What is not printable ASCII is written as ``<U+00B5>``, a backslash too: at the end of a line it would join the
    next one.
    """
    plain = "".join(c if " " <= c <= "~" and c != "\\" else f"<U+{ord(c):04X}>" for c in text)
    return APART.sub(" ", plain)


def comment_lines(text: str, indent: str = "") -> tuple[str, ...]:
    """Harmless lines of at most 110 characters; continued lines are indented by two more."""
    lines = textwrap.wrap(
        harmless(text), WIDTH, initial_indent=indent, subsequent_indent=indent + "  ", break_on_hyphens=False
    )
    return tuple(lines) or ("",)
