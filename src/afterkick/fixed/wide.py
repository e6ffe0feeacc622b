"""Sections that keep more than the data's bits: what the delta, coupled and parallel structures share.

A section's output is fed back as wide as its states are, is handed on with a few bits more than the data have, and is
rounded to the data word once, at the end of the whole filter.  The other roundings are chosen so fine that all of them
together stay below a quarter of an output count.
"""

import math
from collections.abc import Callable, Mapping, Sequence
from typing import TYPE_CHECKING

from attrs import evolve, field, frozen
from flint import arb, fmpq

from afterkick.errors import Problem, Refused
from afterkick.fixed.binary_points import ONE, Scaled, floor_log2
from afterkick.fixed.carry import WIDEST_ACCUMULATOR
from afterkick.fixed.cascade import SCALING_BITS, Builder, bits_of, delayed, float_section, moves, signal_words
from afterkick.fixed.program import Coefficient, ProgramSection, Role, Rounding, Step, Sum, Term, Word
from afterkick.fixed.quantise import ExactSection, Triple
from afterkick.fixed.ranges import Interval, sum_range
from afterkick.fixed.scaling import FloatSection, norm_exponents
from afterkick.numbers import fraction, mid_float, working_bits

if TYPE_CHECKING:
    from afterkick.design.schema import Arithmetic

__all__ = [
    "LEAST_COEFFICIENT_BITS",
    "MOST_STATE_BITS",
    "Core",
    "Frame",
    "Sheet",
    "Weighed",
    "ball_floats",
    "endless_at",
    "known_words",
    "output_sum",
    "weighed_sum",
    "wide_cascade",
]

MOST_STATE_BITS = 60
PRODUCT_BITS = 62
ENOUGH_COEFFICIENT_BITS = 24
"""With 62 bits for a product, states give way to coefficients as long as these have fewer bits."""
LEAST_COEFFICIENT_BITS = 6
BITS_OF_INT = 32
LARGEST_NORM_LOG2 = 200
"""What is more is taken as this: the states are at their widest long before."""


def endless_at(section: ExactSection) -> bool:
    """Whether a response of the section does not decay."""
    return section.marginal or section.unstable


def silent(number: int) -> Problem:
    """A section without any gain."""
    where = f"section {number}"
    return Problem(where, "the filter's gain is zero", "a filter that passes something", "check the model")


def ball_floats(b: Sequence[arb], a: Sequence[arb]) -> FloatSection:
    """A section in doubles; the exponent takes up the size of its numerator."""
    exponent = max((floor_log2(x) for x in b if not x.contains(0)), default=0)
    b0, b1, b2 = (mid_float(x * fmpq(2) ** -exponent) for x in b)
    return FloatSection((b0, b1, b2), (mid_float(a[1]), mid_float(a[2])), exponent)


@frozen
class Frame:
    """Where a section stands: what it filters, at which binary points, and what limits its states."""

    builder: Builder
    state_bits: int | None
    source: str
    source_bits: int
    source_fraction_bits: int
    """Counted from the last place of the signal in the data word."""
    source_place: int
    """The fraction bits of that signal, were it a data word."""
    place: int
    """Those of the section's output, were it a data word."""
    before: tuple[FloatSection, ...]
    """The sections up to this one, driven with the promised peak."""
    after: tuple[FloatSection, ...]
    """Those behind it, up to the first without a norm."""
    roundings: int
    """An upper bound of how many states and wide outputs there are."""
    limits: tuple[int, int] | None = None
    """What an output that integrates is held within, in last places of the data word; None: its word limits it."""
    most_fraction_bits: int = MOST_STATE_BITS
    """Of a state that integrates without rounding, if it has more than it needs for the noise."""

    def fraction_bits(self, errors: Sequence[FloatSection | int]) -> tuple[int, ...]:
        """Of each state: with these all roundings together add less than a quarter of the output's last place.

        ``errors`` are the responses of the wide output to a rounding of each state, or the logarithm of their norms.
        """
        spare = 1 + math.ceil(math.log2(self.roundings)) + (self.builder.rounding is Rounding.FLOOR)
        found = []
        for error in errors:
            norm = error if isinstance(error, int) else norm_exponents([error, *self.after], "peak-gain")[-1]
            found.append(max(0 if norm is None else min(norm, LARGEST_NORM_LOG2) + spare, 0))
        return tuple(found)

    def reaches(self, shapes: Sequence[FloatSection | int]) -> tuple[int, ...]:
        """e of each state, from its response to the section's input: for every input it stays below 2^e full scales.

        An estimate: what proves it comes later.
        """
        found = []
        for shape in shapes:
            norm = shape if isinstance(shape, int) else norm_exponents([*self.before, shape], "peak-gain")[-1]
            found.append(1 if norm is None else norm)
        return tuple(found)

    def widths(self, fractions: Sequence[int], reaches: Sequence[int]) -> tuple[int, ...]:
        """One bit more than the estimate needs, for what roundings add."""
        return tuple(max(self.builder.data_bits + e + g + 1, 8) for e, g in zip(reaches, fractions, strict=True))

    def within(
        self, number: int, fractions: tuple[int, ...], reaches: tuple[int, ...], multiplied: Sequence[bool]
    ) -> tuple[int, ...]:
        """The fraction bits that state words of the given width leave, or the widest ones.

        A state that is ``multiplied`` leaves room for the coefficient.

        :raises Refused: where they can't hold the range.
        """
        needed = self.widths(fractions, reaches)
        if self.state_bits is not None:
            most = [min(self.state_bits, MOST_STATE_BITS)] * len(needed)
            fractions = tuple(g + limit - bits for g, bits, limit in zip(fractions, needed, most, strict=True))
        else:
            beside = PRODUCT_BITS - min(self.builder.coefficient_bits, ENOUGH_COEFFICIENT_BITS)
            most = [min(beside, MOST_STATE_BITS) if factor else MOST_STATE_BITS for factor in multiplied]
            # the allowance for rounding has a bit to give where it makes a word of 32 bits
            most = [BITS_OF_INT if bits == BITS_OF_INT + 1 else limit for bits, limit in zip(needed, most, strict=True)]
            fractions = tuple(g - max(0, bits - limit) for g, bits, limit in zip(fractions, needed, most, strict=True))
        if min(fractions) < 0:
            raise Refused(
                Problem(
                    f"arithmetic.state_bits, section {number}",
                    f"states of {most[0]} bits",
                    f"at least {max(limit - g for limit, g in zip(most, fractions, strict=True) if g < 0)} bits",
                    f"state_bits = {max(needed)}, or a larger output full scale",
                )
            )
        return fractions

    def too_narrow(self, number: int, widest: int) -> Refused:
        """No coefficients of enough bits fit beside the states."""
        return Refused(
            Problem(
                f"arithmetic, section {number}",
                f"products with states of {widest} bits do not fit the accumulator",
                f"sums of at most {self.builder.widest} bits",
                "accumulator_bits = 64, narrower data or states, or a lower sampling rate",
            )
        )


def _either_way(bits: int) -> Interval:
    """A word's range, as far up as down: the bounds take the input to be as large in either direction."""
    peak = 1 << (bits - 1)
    return Interval(-peak, peak)


Weighed = tuple[Scaled, str, str]
"""A factor, the word it multiplies, and a label."""


def weighed_sum(
    builder: Builder,
    dest: str,
    weighed: Sequence[Weighed],
    fractions: Mapping[str, int],
    ranges: dict[str, Interval],
    fraction_bits: int,
) -> Sum | None:
    """The sum at the finest binary point of its terms, rounded to ``fraction_bits``; None where it fits no accumulator.

    ``fractions`` and ``ranges`` are those of the words.
    """
    listed = [term for term in weighed if term[0].integer]
    points = [factor.fraction_bits + fractions[word] for factor, word, _ in listed]
    scale = max([fraction_bits, *points])
    terms = tuple(
        Term(factor.integer, word, scale - point, label)
        for (factor, word, label), point in zip(listed, points, strict=True)
    )
    width = builder.width(terms, ranges, scale - fraction_bits)
    if width is None or scale - fraction_bits > width - 2:
        return None
    return Sum(dest, terms, width, scale - fraction_bits, builder.rounding, builder.overflow)


class Sheet:
    """Words and steps in the making, with the range of each word."""

    def __init__(self, frame: Frame, states: Sequence[tuple[str, int, int]]) -> None:
        self.frame = frame
        self.words: list[Word] = []
        self.sums: list[Sum] = []
        self.ranges = {frame.source: _either_way(frame.source_bits)}
        self.fractions = {frame.source: frame.source_fraction_bits}
        for name, bits, fraction_bits in states:
            self.ranges[name], self.fractions[name] = _either_way(bits), fraction_bits
            self.words.append(Word(name, bits, frame.place + fraction_bits, Role.STATE))

    def temporary(self, dest: str, weighed: Sequence[Weighed], fraction_bits: int) -> bool:
        """A sum as wide as it gets, rounded to so many fraction bits; False where no accumulator holds it."""
        step = weighed_sum(self.frame.builder, dest, weighed, self.fractions, self.ranges, fraction_bits)
        if step is None:
            return False
        self.ranges[dest], self.fractions[dest] = sum_range(step, self.ranges).result, fraction_bits
        self.words.append(Word(dest, bits_of(self.ranges[dest]), self.frame.place + fraction_bits, Role.TEMPORARY))
        self.sums.append(step)
        return True

    def state(self, dest: str, terms: tuple[str, ...], limits: tuple[int, int] | None = None) -> bool:
        """The plain sum of words of the state's own binary point; False where no accumulator holds it.

        ``limits`` are in last places of the data word.
        """
        builder = self.frame.builder
        listed = tuple(Term(1, name) for name in terms)
        width = builder.width(listed, self.ranges, 0)
        if width is None:
            return False
        places = self.fractions[dest]
        held = None if limits is None else (limits[0] << places, limits[1] << places)
        self.sums.append(Sum(dest, listed, width, 0, builder.rounding, builder.overflow, limits=held))
        return True

    def core(
        self,
        first: int,
        wide: str,
        transfer: tuple[Triple, int, Triple, int],
        coefficients: tuple[Coefficient, ...],
        steady: tuple[Sum, ...] | None = None,
    ) -> "Core":
        """The words and sums so far as a section whose transfer function is b, its fraction bits, a and its own."""
        return Core(
            tuple(self.words),
            tuple(self.sums),
            first,
            wide,
            bits_of(self.ranges[wide]),
            self.fractions[wide],
            *transfer,
            coefficients,
            steady,
        )

    def steady(self, dest: str, weighed: Sequence[Weighed]) -> Sum | None:
        """The sum that gives a state the value it rests at; None where no accumulator holds it."""
        return weighed_sum(self.frame.builder, dest, weighed, self.fractions, self.ranges, self.fractions[dest])


@frozen
class Core:
    """One section without the rounding of its output."""

    words: tuple[Word, ...]
    steps: tuple[Step, ...]
    first: int
    """How many of the steps lead to the wide output; the others bring the states on."""
    wide: str
    """The word that holds the output before it is rounded."""
    bits: int
    fraction_bits: int
    """Of the wide output, counted from the last place of the data word."""
    b: Triple
    b_bits: int
    a: Triple
    a_bits: int
    coefficients: tuple[Coefficient, ...] = field(repr=False)
    steady: tuple[Sum, ...] | None = None
    """What gives the states the values they rest at with a constant source, but for an output that integrates; None
    where that is not known."""

    def section(
        self,
        words: tuple[Word, ...],
        steps: tuple[Step, ...],
        source: str,
        dest: str,
        *,
        gain_log2: int = 0,
        marginal: bool,
    ) -> ProgramSection:
        """The section of a program whose words and steps are these."""
        return ProgramSection(
            words=words,
            steps=steps,
            source=source,
            dest=dest,
            b=self.b,
            b_fraction_bits=self.b_bits,
            a=self.a,
            a_fraction_bits=self.a_bits,
            coefficients=self.coefficients,
            gain_log2=gain_log2,
            marginal=marginal,
        )


def wide_cascade(
    make: Callable[[ExactSection, Frame], Core],
    sections: Sequence[ExactSection],
    exponents: Sequence[int],
    arithmetic: "Arithmetic",
    peak: fmpq,
    delay_samples: int,
) -> tuple[ProgramSection, ...]:
    """The sections one behind the other, and the rounding to the data word at the end.

    :raises Refused: with the problems of all sections.
    """
    builder = Builder.of(arithmetic)
    with working_bits(SCALING_BITS):
        floats = [float_section(section) for section in sections]
    driven = FloatSection((float(fraction(peak)), 0.0, 0.0), (0.0, 0.0), 0)
    source, source_bits, source_fraction_bits = delayed("x", delay_samples), builder.data_bits, 0
    words = signal_words("x", Role.INPUT, builder.data_bits - 1, delay_samples, builder.data_bits)
    shift = moves("x", delay_samples)
    before: tuple[FloatSection, ...] = (driven,)
    problems: list[Problem] = []
    wired = []
    for k, section in enumerate(sections):
        last = k == len(sections) - 1
        endless = next((j for j in range(k + 1, len(sections)) if endless_at(sections[j])), len(sections))
        frame = Frame(
            builder,
            arithmetic.state_bits,
            source,
            source_bits,
            source_fraction_bits,
            builder.data_bits - 1 - (exponents[k - 1] if k else 0),
            builder.data_bits - 1 - exponents[k],
            before,
            tuple(floats[k + 1 : endless]),
            4 * len(sections),
        )
        handed_on = frame.fraction_bits([FloatSection((1.0, 0.0, 0.0), (0.0, 0.0), 0)])[0]
        # an output without a norm is limited by its state, to twice the full scale
        before = (evolve(driven, b=(2.0, 0.0, 0.0)),) if endless_at(section) else (*before, floats[k])
        try:
            if section.largest_numerator_log2() is None:
                raise Refused(silent(section.number))
            core = make(section, frame)
        except Refused as refusal:
            problems += refusal.problems
            continue
        wide = next(word for word in core.words if word.name == core.wide)
        if last:
            word, after = Word("y", builder.data_bits, frame.place, Role.OUTPUT), [output_sum(builder, (core,))]
        elif wide.role is Role.TEMPORARY and core.fraction_bits <= handed_on:
            word, after = wide, []
        else:
            read = evolve(frame, source=core.wide, source_bits=wide.bits, source_fraction_bits=core.fraction_bits)
            sheet = Sheet(read, ())
            sheet.temporary(f"v{k + 1}", [(ONE, core.wide, "")], min(handed_on, core.fraction_bits))
            (word,), after = sheet.words, sheet.sums
        own = core.words if word is wide else (word, *core.words)
        wired.append(
            core.section(
                (*(words if k == 0 else ()), *own),
                (*core.steps[: core.first], *after, *core.steps[core.first :], *(shift if k == 0 else ())),
                source,
                word.name,
                gain_log2=(exponents[k - 1] if k else 0) - exponents[k],
                marginal=section.marginal,
            )
        )
        source, source_bits, source_fraction_bits = word.name, word.bits, word.fraction_bits - frame.place
    if problems:
        raise Refused(problems)
    return tuple(wired)


def known_words(
    builder: Builder, cores: Sequence[Core], data_words: Sequence[str]
) -> tuple[dict[str, int], dict[str, Interval]]:
    """The fraction bits, counted from the last place of the data, and the ranges of wide outputs and data words."""
    fractions = {core.wide: core.fraction_bits for core in cores} | dict.fromkeys(data_words, 0)
    ranges = {core.wide: Interval.of_word(core.bits) for core in cores}
    return fractions, ranges | dict.fromkeys(data_words, Interval.of_word(builder.data_bits))


def output_sum(
    builder: Builder, cores: Sequence[Core], taps: Sequence[Weighed] = (), limits: tuple[int, int] | None = None
) -> Sum:
    """The output word: wide outputs and what the taps take of data words, added up, rounded, and held within limits."""
    weighed = [*((ONE, core.wide, "") for core in cores), *taps]
    step = weighed_sum(builder, "y", weighed, *known_words(builder, cores, [word for _, word, _ in taps]), 0)
    if step is None:
        widen = "accumulator_bits = 64, " if builder.widest < WIDEST_ACCUMULATOR else ""
        raise Refused(
            Problem(
                "arithmetic",
                "the sum of the sections does not fit the accumulator",
                f"a sum of at most {builder.widest} bits",
                f"{widen}narrower data or states, or a larger output full scale",
            )
        )
    return evolve(step, limits=limits)
