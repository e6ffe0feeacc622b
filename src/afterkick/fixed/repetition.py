"""A Program with a constant input, run until it repeats itself: as one Python function, for runs that are too long for
the interpreter.

Only for programs in which no word ever overflows or is clamped: those rules are left out.  The tests hold the function
and the simulator together, integer for integer.
"""

from collections.abc import Callable

from attrs import frozen

from afterkick.fixed.narrow import rounding_offset
from afterkick.fixed.program import Move, Program, Role, Rounding, Step

__all__ = ["Repetition", "until_repeated"]

FIRST_WAIT = 16
"""So many samples after a reset a state is kept and compared with all that follow; then, a quarter later, another."""


@frozen
class Repetition:
    """What a run ends in."""

    lowest: int
    highest: int
    """Of the output, over a whole period; over the last fifth of the run where there is none."""
    period: int | None
    """After so many samples every state is the same again, and so all that follows; None where that was not seen."""
    samples: int
    """How many were run."""


def until_repeated(program: Program) -> Callable[[int, int], Repetition]:
    """A function of a constant input code and the number of samples that it may take, from a reset on."""
    names = {word.name: f"w{i}" for i, word in enumerate(program.words)}
    states = [names[word.name] for word in program.words if word.role is Role.STATE]
    state = "".join(f"{name}, " for name in states)
    output = names[program.output]
    source = [
        f"def run({names[program.input]}, most):",
        *(f"    {name} = 0" for name in states),
        f"    n, marked, until, mark = 0, 0, {FIRST_WAIT}, ({state})",
        "    while True:",
        "        n += 1",
        *(f"        {line}" for step in program.steps for line in _lines(step, names)),
        f"        if n == marked + 1: lowest = highest = {output}",
        f"        elif {output} < lowest: lowest = {output}",
        f"        elif {output} > highest: highest = {output}",
        f"        state = ({state})",
        "        if state == mark: return lowest, highest, n - marked, n",
        "        if n == until:",
        "            until += until // 4",
        "            if until > most: return lowest, highest, None, n",
        "            mark, marked = state, n",
    ]
    built: dict[str, Callable[[int, int], tuple[int, int, int | None, int]]] = {}
    # the text has the program's own integers in it, and names by number
    exec(compile("\n".join(source), f"<{program.name}>", "exec"), {}, built)
    return lambda code, most: Repetition(*built["run"](code, most))


def _lines(step: Step, names: dict[str, str]) -> list[str]:
    """The rules are those of ``narrow``."""
    dest = names[step.dest]
    if isinstance(step, Move):
        return [f"{dest} = {names[step.source]}"]
    total = " + ".join(f"{term.factor} * {names[term.word]}" for term in step.terms)
    if step.right_shift == 0:
        return [f"{dest} = {total}"]
    offset = str(rounding_offset(step.right_shift, step.rounding))
    if step.rounding is Rounding.EVEN:
        offset = f"{offset} - 1 + ((total >> {step.right_shift}) & 1)"
    lines = [f"total = {total}", f"{dest} = (total + {offset}) >> {step.right_shift}"]
    if step.residue is not None:
        lines.append(f"{names[step.residue]} = total - ({dest} << {step.right_shift})")
    return lines
