"""Program or FloatProgram -> C files as text.  The templates place what the views decide."""

from functools import lru_cache
from pathlib import Path
from typing import TYPE_CHECKING

from afterkick.emit.selftest import selftest_view
from afterkick.emit.symbols import Symbols
from afterkick.emit.view import program_view
from afterkick.errors import Problem, Refused
from afterkick.fixed.program import Program
from afterkick.resources import resource_folder

if TYPE_CHECKING:
    from jinja2 import Environment

    from afterkick.floating import FloatProgram

__all__ = ["emit_c"]

LANGUAGE = "c"
FILES = {
    ".h": "header.h.j2",
    ".c": "source.c.j2",
    "_selftest.h": "selftest.h.j2",
    "_selftest.c": "selftest.c.j2",
}


def emit_c(
    program: "Program | FloatProgram", *, notes: tuple[str, ...] = (), templates: Path | None = None
) -> dict[str, str]:
    """NAME.h, NAME.c, NAME_selftest.h and NAME_selftest.c: the same program gives the same bytes.

    ``notes`` are lines for the header, for example measured errors.  Templates in ``templates``/c go before those that
    come with the package.

    :raises Refused: for a program whose sums could overflow, or whose singles do within the promised peak, a name that
        can't be a prefix of C symbols, or a template that can't be used.
    """
    if isinstance(program, Program):
        view = program_view(program, notes)
        return _rendered("", view.symbols, templates, view=view, test=selftest_view(program, view.symbols))
    from afterkick.emit.float_selftest import float_selftest_view  # fixed point pays nothing for them
    from afterkick.emit.float_view import float_program_view

    single = float_program_view(program, notes)
    test = float_selftest_view(program, single.symbols)
    return _rendered("float_", single.symbols, templates, view=single, test=test)


def _rendered(prefix: str, symbols: Symbols, templates: Path | None, **context: object) -> dict[str, str]:
    folders = () if templates is None else (_own_folder(templates),)
    environment = _environment((*folders, resource_folder("templates") / LANGUAGE))
    texts = {}
    for ending, name in FILES.items():
        template = prefix + name
        try:
            texts[symbols.file(ending)] = environment.get_template(template).render(context)
        except Exception as error:  # a template is a program of the user's own: it can raise anything
            if templates is None:
                raise
            where, found = f"template {LANGUAGE}/{template}", f"{type(error).__name__}: {error}"
            raise Refused(Problem(where, found, "a template that renders", "correct the template")) from error
    return texts


@lru_cache(maxsize=4)
def _environment(folders: tuple[Path, ...]) -> "Environment":
    """The templates of the first folder that has each; read again where a file has changed."""
    from jinja2 import ChoiceLoader, Environment, FileSystemLoader, StrictUndefined

    return Environment(
        loader=ChoiceLoader([FileSystemLoader(folder) for folder in folders]),
        undefined=StrictUndefined,
        autoescape=False,
        trim_blocks=True,
        lstrip_blocks=True,
        keep_trailing_newline=True,
    )


def _own_folder(templates: Path) -> Path:
    folder = templates / LANGUAGE
    if not folder.is_dir():
        found = f"{templates} holds no folder {LANGUAGE}"
        raise Refused(Problem("templates", found, f"a folder with templates in {LANGUAGE}/", f"make {folder}"))
    return folder
