"""FloatProgram -> C files as text."""

from pathlib import Path

from afterkick.emit.c import rendered
from afterkick.emit.float_selftest import float_selftest_view
from afterkick.emit.float_view import float_program_view
from afterkick.floating.program import FloatProgram

__all__ = ["emit_float_c"]

FILES = {
    ".h": "float_header.h.j2",
    ".c": "float_source.c.j2",
    "_selftest.h": "float_selftest.h.j2",
    "_selftest.c": "float_selftest.c.j2",
}


def emit_float_c(
    program: FloatProgram, *, notes: tuple[str, ...] = (), templates: Path | None = None
) -> dict[str, str]:
    """NAME.h, NAME.c, NAME_selftest.h and NAME_selftest.c: the same program gives the same bytes.

    ``notes`` are lines for the header, for example measured errors.  Templates in ``templates``/c go before those that
    come with the package.

    :raises Refused: for a name that can't be a prefix of C symbols, or a template that can't be used.
    """
    view = float_program_view(program, notes)
    return rendered(FILES, view.symbols, templates, view=view, test=float_selftest_view(program, view.symbols))
