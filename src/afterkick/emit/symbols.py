"""The one owner of the names in emitted C."""

from attrs import frozen

from afterkick.design.names import KEYWORDS, identifier_fault
from afterkick.errors import Problem, Refused

__all__ = ["Symbols"]

# Parameters and locals of the emitted functions.
TAKEN = frozenset({"state", "input", "output", "count", "value", "places", "lowest", "highest", "i"})


@frozen
class Symbols:
    """Every symbol at file scope is the design's name, an underscore and what it is."""

    prefix: str

    @classmethod
    def of(cls, name: str) -> "Symbols":
        """The symbols of a design.

        :raises Refused: for a name that can't be the prefix of C symbols.
        """
        fault = identifier_fault(name)
        if fault:
            accepted = "a C identifier that starts with a letter"
            raise Refused(Problem("design.name", f'"{name}", {fault}', accepted, "choose another name"))
        return cls(name)

    def __call__(self, what: str) -> str:
        return f"{self.prefix}_{what}"

    def local(self, word: str) -> str:
        """The local variable or struct member for a word."""
        return f"{word}_" if word in KEYWORDS or word in TAKEN else word

    def file(self, what: str) -> str:
        """A file's name, for example ``slam.h`` for ``.h``."""
        return f"{self.prefix}{what}"

    def guard(self, what: str) -> str:
        """An include guard; it keeps the name's case, since names may differ in case only."""
        return f"{self.prefix}_{what}_INCLUDED"
