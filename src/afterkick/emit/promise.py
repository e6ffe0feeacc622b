"""Which input codes the emitted code takes, and what a relaxed one says of them."""

from collections.abc import Iterator

from afterkick.emit.text import comment_lines
from afterkick.fixed.program import Program
from afterkick.fixed.ranges import Interval, analyse

__all__ = ["accepted_codes", "others", "promise"]


def accepted_codes(program: Program) -> Interval:
    """All that the input word holds, or what the program's proof is for."""
    word = program.word(program.input)
    return analyse(program).proved.get(word.name, Interval.of_word(word.bits))


def others(program: Program) -> str:
    """What happens with other codes."""
    if program.proof is None:
        return "nothing is promised for others"
    return "others are undefined behaviour, and nothing checks for them"


def promise(program: Program) -> Iterator[str]:
    """Lines on what a relaxed program relies on; none for others."""
    if program.proof is None:
        return
    codes = accepted_codes(program)
    yield ""
    yield from comment_lines(
        f"CAUTION, relaxed: input codes must be from {codes.lowest} to {codes.highest}, and the memory must start from "
        f"{program.name}_reset. For these it is proved which range each word keeps, listed in {program.name}.h; the "
        "checks and widths that this makes idle are left out. Other codes are not accepted, and nothing checks for "
        "them: a sum may overflow then, which is undefined behaviour in C. Limit the code before the call wherever a "
        "larger one can occur."
    )
