"""A filter as a short straight-line integer program: data, not code.

A Program is a list of sections; each has its words and its steps.  The simulator interprets it, the bounds derive
their linear systems from it, the C is printed from it: so they can't disagree.  A new structure is one more function
that returns a Program.
"""

from collections.abc import Iterable, Iterator
from enum import Enum

from attrs import evolve, field, frozen
from flint import fmpq

__all__ = [
    "Coefficient",
    "Move",
    "Overflow",
    "Preset",
    "Program",
    "ProgramSection",
    "Proof",
    "ProvedRange",
    "Role",
    "Rounding",
    "SignalFormat",
    "Step",
    "Sum",
    "Term",
    "Word",
    "dependencies",
    "quantised_dc_gain",
    "with_accumulator",
]


class Role(Enum):
    """What a word is for, and so where it lives."""

    INPUT = "input"
    """Set by the caller at every sample; never written by a step."""
    STATE = "state"
    """Kept from sample to sample; zero after a reset."""
    TEMPORARY = "temporary"
    """Written once in every sample, before it is read."""
    OUTPUT = "output"
    """The temporary that the caller receives."""


class Rounding(Enum):
    """How the bits below the right shift are dropped."""

    NEAREST = "nearest"
    """To the nearest integer; a tie goes up, towards plus infinity."""
    FLOOR = "floor"
    """Towards minus infinity."""
    EVEN = "even"
    """To the nearest integer; a tie goes to the even one."""


class Overflow(Enum):
    """What happens to a value that its word can't hold."""

    SATURATE = "saturate"
    """The nearest value the word holds."""
    WRAP = "wrap"
    """The value modulo 2^bits, in two's complement."""


@frozen
class Word:
    """A two's-complement integer of ``bits`` bits; the code c stands for c * 2^-fraction_bits of full scale."""

    name: str
    bits: int
    fraction_bits: int
    role: Role

    @property
    def lowest(self) -> int:
        """The lowest code, -2^(bits-1)."""
        return -(1 << (self.bits - 1))

    @property
    def highest(self) -> int:
        """The highest code, 2^(bits-1) - 1."""
        return (1 << (self.bits - 1)) - 1


@frozen
class Term:
    """Contributes ``(coefficient * word) << shift`` to a sum."""

    coefficient: int
    word: str
    shift: int = 0
    label: str = ""
    """Which of the section's coefficients this is, for readers."""
    note: str = ""
    """What sets the factor apart from that coefficient, for readers."""

    @property
    def factor(self) -> int:
        """The whole factor in front of the word."""
        return self.coefficient << self.shift


@frozen
class Sum:
    """``dest = narrow((sum of the terms) >> right_shift)``.

    The sum is exact in ``accumulator_bits`` (32 or 64) bits; the shift rounds by ``rounding``; the result is held
    within the clamp ``limits``, if there are any; what the destination can't hold is treated by ``overflow``.  What the
    shift drops, sum - (quotient << right_shift), goes into the word ``residue``, if there is one: the quotient is taken
    before clamp and overflow rule act, so that no excess is in it.
    """

    dest: str
    terms: tuple[Term, ...]
    accumulator_bits: int
    right_shift: int
    rounding: Rounding
    overflow: Overflow
    residue: str | None = None
    limits: tuple[int, int] | None = None
    """Lowest and highest value of the destination that the clamp lets through."""


@frozen
class Move:
    """``dest = source``, of the same width."""

    dest: str
    source: str


Step = Sum | Move


@frozen
class Coefficient:
    """One integer coefficient beside the exact number that it stands for."""

    name: str
    """b0, b1, b2 (of the present input and the two before) or a1, a2 (of the two outputs before)."""
    integer: int
    fraction_bits: int
    exact: str
    """The exact number in decimal, to 9 significant digits."""
    error_last_places: float
    """(stored - exact) * 2^fraction_bits; an estimate good to double precision."""


@frozen
class ProgramSection:
    """The words and steps of one section, and for readers its transfer function in integers.

    H = (sum b[i] z^-i) * 2^-b_fraction_bits / ((sum a[i] z^-i) * 2^-a_fraction_bits), where a[0] is 2^a_fraction_bits.
    """

    words: tuple[Word, ...]
    steps: tuple[Step, ...]
    source: str
    """The word the section filters."""
    dest: str
    """The word that receives the result."""
    b: tuple[int, int, int]
    b_fraction_bits: int
    a: tuple[int, int, int]
    a_fraction_bits: int
    coefficients: tuple[Coefficient, ...]
    """Of b and of a[1:], those that are not exactly zero; b with the section's share of the scaling in it."""
    gain_log2: int = 0
    """The power of two that the scaling put into this section."""
    marginal: bool = False
    """Whether the section has a pole on the unit circle."""


@frozen
class SignalFormat:
    """What the codes of an input or output stand for: 2^(bits-1) is ``full_scale`` units."""

    unit: str
    full_scale: fmpq
    peak: fmpq
    """The largest magnitude, in the unit, that is promised (input) or meant (output)."""


@frozen
class ProvedRange:
    """What a computed word can hold at most, proved; both ends are in the word's own last places."""

    word: str
    lowest: int
    highest: int


@frozen
class Proof:
    """Ranges that hold from a reset on, for ever, while the input codes stay within ``peak_code``."""

    peak_code: int
    ranges: tuple[ProvedRange, ...]


@frozen
class Preset:
    """What gives the states of a filter that integrates the values from which it goes on without a bump.

    Its steps read the input and the word ``wanted``, write every state, and leave the filter so that its output is the
    wanted code for as long as the input stays the same and nothing is integrated.
    """

    words: tuple[Word, ...]
    """Those that are not the program's own."""
    steps: tuple[Step, ...]
    wanted: str


@frozen
class Program:
    """Everything that the shipped integers do, and what the printers say about it."""

    name: str
    """A C identifier, the prefix of every emitted symbol."""
    title: str
    sections: tuple[ProgramSection, ...]
    input: str
    output: str
    data_bits: int
    coefficient_bits: int
    structure: str
    rounding: Rounding
    overflow: Overflow
    scaling: str
    rate_hz: fmpq
    method: str
    delay_samples: int
    """The whole samples of delay that the program itself adds in front of its sections."""
    input_format: SignalFormat
    output_format: SignalFormat
    digest: str = ""
    """Of the design; printed, never interpreted."""
    carry: int = 0
    """How many past residues the error feedback uses: 0 is none."""
    preset: Preset | None = None
    """None where nothing is integrated, or by a structure that does not keep it apart."""
    proof: Proof | None = None
    """A word in it is neither saturated nor wrapped; the simulator refuses a run that leaves its range."""
    _words: dict[str, Word] = field(init=False, repr=False, eq=False)

    @_words.default
    def _index(self) -> dict[str, Word]:
        return {word.name: word for section in self.sections for word in section.words}

    @property
    def words(self) -> tuple[Word, ...]:
        """All words in the order of the sections."""
        return tuple(word for section in self.sections for word in section.words)

    @property
    def steps(self) -> Iterator[Step]:
        """All steps in the order they are carried out."""
        for section in self.sections:
            yield from section.steps

    @property
    def output_ends(self) -> tuple[int, int]:
        """The lowest and the highest output code: of the clamp, where there is one, else of the word."""
        word = self.word(self.output)
        limits = (step.limits for step in self.steps if isinstance(step, Sum) and step.dest == self.output)
        return next(limits, None) or (word.lowest, word.highest)

    def word(self, name: str) -> Word:
        """The word of that name; KeyError where there is none."""
        return self._words[name]


def dependencies(program: Program, names: Iterable[str]) -> frozenset[str]:
    """The words ``names`` and every word that has an influence on them, over any number of samples."""
    sources: dict[str, set[str]] = {word.name: set() for word in program.words}
    for step in program.steps:
        read = {term.word for term in step.terms} if isinstance(step, Sum) else {step.source}
        sources[step.dest] |= read
        if isinstance(step, Sum) and step.residue is not None:
            sources[step.residue] |= read
    found: set[str] = set()
    waiting = set(names)
    while waiting:
        found |= waiting
        waiting = set().union(*(sources[name] for name in waiting)) - found
    return frozenset(found)


def with_accumulator(program: Program, dest: str, bits: int) -> Program:
    """The program with another accumulator for the sum that writes ``dest``."""

    def changed(section: ProgramSection) -> ProgramSection:
        steps = (
            evolve(step, accumulator_bits=bits) if isinstance(step, Sum) and step.dest == dest else step
            for step in section.steps
        )
        return evolve(section, steps=tuple(steps))

    return evolve(program, sections=tuple(changed(section) for section in program.sections))


def quantised_dc_gain(program: Program) -> fmpq | None:
    """The exact DC gain of the integer coefficients, in output units per input unit; None with a pole at z = 1."""
    product, total = fmpq(1), fmpq(0)
    for section in program.sections:
        numerator, denominator = sum(section.b), sum(section.a)
        if denominator == 0:
            return None
        gain = fmpq(numerator, denominator) * fmpq(2) ** (section.a_fraction_bits - section.b_fraction_bits)
        product, total = product * gain, total + gain
    of_codes = program.output_format.full_scale / program.input_format.full_scale
    return of_codes * (total if program.structure == "parallel" else product)
