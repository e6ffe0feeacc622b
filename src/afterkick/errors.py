"""What can go wrong, as a small tree of exceptions.

Every message names where (a key, a block, a file), what was found, what is accepted and a remedy.  A stage that finds
several problems reports all of them at once.
"""

from collections.abc import Callable, Iterable
from typing import TypeVar

from attrs import frozen

__all__ = ["AfterkickError", "Lacking", "Problem", "Refused", "Uncertified", "each"]

Item = TypeVar("Item")
Result = TypeVar("Result")


@frozen
class Problem:
    """One thing that is wrong with the input."""

    where: str
    """The key, for example ``model.block[2].corner_hz``, or the stage that refuses."""
    found: str
    accepted: str
    remedy: str = ""

    def __str__(self) -> str:
        text = f"{self.where}: {self.found}; accepted: {self.accepted}"
        return f"{text}; remedy: {self.remedy}" if self.remedy else text


class AfterkickError(Exception):
    """The root of the errors a user can cause or cure."""


class Refused(AfterkickError):
    """The input is wrong, or asks for what can't be done: exit code 2."""

    def __init__(self, problems: Iterable[Problem] | Problem) -> None:
        self.problems = (problems,) if isinstance(problems, Problem) else tuple(problems)
        super().__init__("\n".join(str(problem) for problem in self.problems))


class Uncertified(AfterkickError):
    """A number could not be certified at the highest working precision: exit code 2."""


class Lacking(AfterkickError):
    """This machine lacks something, a compiler for example: exit code 3."""


def each(make: Callable[[Item], Result], items: Iterable[Item], problems: Iterable[Problem] = ()) -> list[Result]:
    """``make`` of every item.

    :raises Refused: with ``problems``, and what was refused of any item.
    """
    found, made = list(problems), []
    for item in items:
        try:
            made.append(make(item))
        except Refused as refusal:
            found += refusal.problems
    if found:
        raise Refused(found)
    return made
