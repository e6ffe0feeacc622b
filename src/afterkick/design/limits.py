"""What one value of a design file may be: the limits that annotate the fields of the schema.

A limit is data beside the type, as in ``Annotated[fmpq, Number(above=0)]``.  It knows what it accepts in words, and
raises :class:`Wrong` for what it does not accept; the reader adds the key path.
"""

from collections.abc import Iterable
from decimal import Decimal
from typing import ClassVar, TypeAlias
from unicodedata import category

from attrs import frozen
from flint import fmpq

from afterkick.design.names import IDENTIFIER_RULE, TARGET_RULE, identifier_fault, is_target_name
from afterkick.numbers import fraction, rational

__all__ = [
    "HIGHEST_ORDER",
    "Choice",
    "FeedbackOrder",
    "Identifier",
    "Items",
    "Line",
    "ListLimit",
    "Number",
    "Polynomial",
    "TargetName",
    "Unreadable",
    "ValueLimit",
    "Whole",
    "Wrong",
    "describe",
    "exact_number",
    "nearest",
    "plain",
    "visible",
]

HIGHEST_ORDER = 16
HIGHEST_EXPONENT = 300
MOST_DIGITS = 400
BITS_PER_DIGIT = 3.33
LONGEST_LINE = 120
LONGEST_SHOWN = 60

UNPRINTABLE = frozenset({"Cc", "Cf", "Co", "Cs", "Zl", "Zp"})


class Wrong(Exception):
    """One value is not accepted; the reader turns it into a Problem by adding the key path."""

    def __init__(self, found: str, accepted: str, remedy: str) -> None:
        super().__init__(found, accepted, remedy)
        self.found = found
        self.accepted = accepted
        self.remedy = remedy


@frozen
class Unreadable:
    """A TOML number whose size no filter needs; kept apart so that nobody computes with it."""

    text: str


def visible(text: str) -> str:
    """``text`` in double quotes, cut to a line, with escapes for what a terminal can't show."""
    cut = text if len(text) <= LONGEST_SHOWN else text[:LONGEST_SHOWN] + "..."
    body = "".join(c if c.isprintable() else c.encode("unicode_escape").decode("ascii") for c in cut)
    return f'"{body}"'


def describe(value: object) -> str:
    """A TOML value as a message shows it; never expands a huge number."""
    match value:
        case bool():
            return str(value).lower()
        case str():
            return f"the text {visible(value)}"
        case int():
            return str(value) if value.bit_length() < 4 * LONGEST_SHOWN else "an integer of absurd size"
        case Decimal():
            return str(value) if len(value.as_tuple().digits) < LONGEST_SHOWN else f"{value:.6e}..."
        case Unreadable():
            return f"the number {value.text[:LONGEST_SHOWN]}{'...' if len(value.text) > LONGEST_SHOWN else ''}"
        case list():
            return f"a list of {len(value)}" if value else "an empty list"
        case dict():
            return "a table"
        case _:
            return f"the date or time {value}"


def plain(value: fmpq) -> str:
    """A rational as a message shows it: up to 12 significant digits."""
    return f"{float(fraction(value)):.12g}"


def nearest(text: str, names: Iterable[str]) -> str | None:
    """The name that was probably meant."""
    from difflib import get_close_matches  # only a wrong file pays for it

    by_lower_case = {name.lower(): name for name in names}
    close = get_close_matches(text[:LONGEST_LINE].lower(), by_lower_case, n=1)
    return by_lower_case[close[0]] if close else None


def exact_number(raw: object) -> fmpq:
    """The exact rational of a TOML integer or float.

    :raises Wrong: for what is no number, is not finite, or has over 400 digits or an exponent beyond +-300.
    """
    match raw:
        case bool():
            pass
        case int() if raw.bit_length() <= HIGHEST_EXPONENT * BITS_PER_DIGIT:
            return rational(raw)
        case Decimal() if not raw.is_finite():
            raise Wrong(describe(raw), "a finite number", "write the number that is meant")
        # The exponent is looked at before any power of ten is formed.
        case Decimal() if abs(raw.adjusted()) <= HIGHEST_EXPONENT and len(raw.as_tuple().digits) <= MOST_DIGITS:
            return rational(raw)
        case int() | Decimal() | Unreadable():
            size = f"of magnitude 1e-{HIGHEST_EXPONENT} to 1e{HIGHEST_EXPONENT} with at most {MOST_DIGITS} digits"
            raise Wrong(describe(raw), f"a number {size}", "choose units in which the numbers are moderate")
    raise Wrong(describe(raw), "a number", "write one number, without quotes or brackets")


@frozen
class Number:
    """A real number in a range."""

    above: int | None = None
    least: int | None = None
    most: int | None = None
    nonzero: bool = False
    remedy: str = ""

    @property
    def accepted(self) -> str:
        ends = [
            text
            for text, given in (
                (f"above {self.above}", self.above is not None),
                (f"of at least {self.least}", self.least is not None),
                (f"of at most {self.most}", self.most is not None),
                ("other than 0", self.nonzero),
            )
            if given
        ]
        return "a number " + " and ".join(ends)

    def check(self, value: fmpq) -> None:
        if (
            (self.above is not None and value <= self.above)
            or (self.least is not None and value < self.least)
            or (self.most is not None and value > self.most)
            or (self.nonzero and value == 0)
        ):
            raise Wrong(plain(value), self.accepted, self.remedy or "write a number in that range")


@frozen
class Whole:
    """An integer in a range, both ends included."""

    least: int
    most: int

    @property
    def accepted(self) -> str:
        return f"an integer from {self.least} to {self.most}"

    def check(self, value: int) -> None:
        if not self.least <= value <= self.most:
            nearest_whole = min(max(value, self.least), self.most)
            raise Wrong(describe(value), self.accepted, f"the nearest is {nearest_whole}")


@frozen
class Choice:
    """One of a few names or integers."""

    names: tuple[str, ...] | tuple[int, ...]

    @property
    def accepted(self) -> str:
        shown = [f'"{name}"' if isinstance(name, str) else str(name) for name in self.names]
        return " or ".join([", ".join(shown[:-1]), shown[-1]]) if len(shown) > 1 else shown[0]

    def check(self, value: str | int) -> None:
        if value in self.names:
            return
        meant = nearest(value, map(str, self.names)) if isinstance(value, str) else None
        raise Wrong(describe(value), self.accepted, f'did you mean "{meant}"?' if meant else "choose one of these")


@frozen
class FeedbackOrder:
    """An order of error feedback, or a switch for it."""

    accepted: ClassVar[str] = "true or false, or the order 1 or 2"

    def check(self, value: bool | int) -> None:
        if value is not False and value not in (1, 2):
            raise Wrong(describe(value), self.accepted, "choose one of these")


@frozen
class Line:
    """One line of printable text: no control, bidirectional or line-breaking characters.

    Quotes, braces, comment ends, backslashes and trigraphs are accepted: who writes the text into C neutralises them.
    """

    shortest: int = 0

    @property
    def accepted(self) -> str:
        return f"one line of printable text of {self.shortest} to {LONGEST_LINE} characters"

    def check(self, value: str) -> None:
        if not self.shortest <= len(value) <= LONGEST_LINE:
            remedy = "shorten it" if value else "write a text or leave the key out"
            raise Wrong(f"a text of {len(value)} characters", self.accepted, remedy)
        for character in value:
            if category(character) in UNPRINTABLE:
                name = f"U+{ord(character):04X}"
                raise Wrong(f"the character {name} in {visible(value)}", self.accepted, f"remove {name}")


@frozen
class Identifier:
    """A C identifier that can be the prefix of every emitted symbol and the stem of every emitted file."""

    accepted: ClassVar[str] = IDENTIFIER_RULE

    def check(self, value: str) -> None:
        fault = identifier_fault(value)
        if fault:
            raise Wrong(f"{describe(value)}, {fault}", self.accepted, "choose another name")


@frozen
class TargetName:
    """The name of a target profile, which is also the stem of its file."""

    accepted: ClassVar[str] = TARGET_RULE

    def check(self, value: str) -> None:
        if not is_target_name(value):
            raise Wrong(describe(value), self.accepted, "the command afterkick targets lists the profiles")


@frozen
class Items:
    """A list of ``least`` to ``most`` items."""

    least: int
    most: int
    what: str
    remedy: str = "write each item between the brackets, commas between them"

    @property
    def accepted(self) -> str:
        counts = str(self.least) if self.least == self.most else f"{self.least} to {self.most}"
        return f"a list of {counts} {self.what}"

    def check_length(self, raw: object) -> None:
        if not isinstance(raw, list) or not self.least <= len(raw) <= self.most:
            too_long = isinstance(raw, list) and len(raw) > self.most > self.least
            raise Wrong(describe(raw), self.accepted, "split the design into two" if too_long else self.remedy)

    def check_first(self, first: object) -> None:
        """A list of this kind may start with anything."""


@frozen
class Polynomial:
    """A list of coefficients, highest power first, whose first one is not zero."""

    lowest_order: int

    @property
    def accepted(self) -> str:
        return (
            f"a list of {self.lowest_order + 1} to {HIGHEST_ORDER + 1} numbers, highest power first"
            f" (order {self.lowest_order} to {HIGHEST_ORDER})"
        )

    def check_length(self, raw: object) -> None:
        if not isinstance(raw, list) or not raw:
            raise Wrong(describe(raw), self.accepted, "write the coefficients in brackets, with commas between them")
        if not self.lowest_order <= len(raw) - 1 <= HIGHEST_ORDER:
            too_low = 'a gain alone is no filter: put one with its filter into kind = "blocks"'
            remedy = "split the filter into two designs" if len(raw) > HIGHEST_ORDER else too_low
            raise Wrong(f"{describe(raw)} (order {len(raw) - 1})", self.accepted, remedy)

    def check_first(self, first: object) -> None:
        if not isinstance(first, bool) and isinstance(first, int | Decimal) and first == 0:
            raise Wrong("a first coefficient of 0", "a first coefficient other than 0", "leave out the leading zeros")


ValueLimit: TypeAlias = Number | Whole | Choice | FeedbackOrder | Line | Identifier | TargetName
ListLimit: TypeAlias = Items | Polynomial
