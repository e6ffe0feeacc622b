"""Interval arithmetic over a Program: what every sum can reach, whatever the states hold.

Rigorous: states range over their whole words, words written in the same sample over what their step can produce; both
only over what is proved of them, if the program carries a proof.
Every partial sum is covered in any order of the terms, the rounding offset included, since a signed overflow is
undefined in C.
"""

from collections.abc import Iterable

from attrs import field, frozen

from afterkick.errors import Problem, Refused
from afterkick.fixed.narrow import clamp, residue_limits, rounding_offset, shift_right
from afterkick.fixed.program import Move, Program, Role, Step, Sum, Term, Word

__all__ = ["Analysis", "Interval", "SumRange", "analyse", "largest_partial_sum", "require_valid", "sum_range"]

ACCUMULATOR_WIDTHS = (32, 64)
WIDEST_SIGNAL = 32
WIDEST_INNER = 64
"""Of states and temporaries."""


@frozen
class Interval:
    """The integers from ``lowest`` to ``highest``."""

    lowest: int
    highest: int

    def __contains__(self, other: object) -> bool:
        return isinstance(other, Interval) and self.lowest <= other.lowest and other.highest <= self.highest

    @classmethod
    def of_word(cls, bits: int) -> "Interval":
        """All that a word of that many bits holds."""
        return cls(-(1 << (bits - 1)), (1 << (bits - 1)) - 1)


@frozen
class SumRange:
    """What a sum can reach."""

    magnitude: int
    """No partial sum, in any order of the terms and with the rounding offset, has a larger magnitude."""
    result: Interval
    """After the right shift and the clamp, before the overflow rule."""


def largest_partial_sum(terms: tuple[Term, ...], ranges: dict[str, Interval], offset: int) -> int:
    """The largest magnitude of any partial sum, of any product and of any factor."""
    up = down = 0
    factors = [1]
    for term in terms:
        reach = ranges[term.word]
        ends = (term.factor * reach.lowest, term.factor * reach.highest)
        up += max(0, *ends)
        down += max(0, -min(ends))
        factors.append(abs(term.factor))
    return max(up + offset, down, *factors)


def sum_range(step: Sum, ranges: dict[str, Interval]) -> SumRange:
    """The reach of a sum, given that of the words it reads."""
    lowest = sum(min(t.factor * ranges[t.word].lowest, t.factor * ranges[t.word].highest) for t in step.terms)
    highest = sum(max(t.factor * ranges[t.word].lowest, t.factor * ranges[t.word].highest) for t in step.terms)
    offset = rounding_offset(step.right_shift, step.rounding)
    # Every rounding rule is monotonic, so the ends of the result come from the ends of the sum.
    result = Interval(
        shift_right(lowest, step.right_shift, step.rounding), shift_right(highest, step.right_shift, step.rounding)
    )
    if step.limits is not None:
        result = Interval(clamp(result.lowest, step.limits), clamp(result.highest, step.limits))
    return SumRange(largest_partial_sum(step.terms, ranges, offset), result)


@frozen
class Analysis:
    """What interval arithmetic says about a Program."""

    faults: tuple[str, ...]
    """Why the program is not valid; empty where it is."""
    may_overflow: frozenset[str]
    """The words whose overflow rule can come into play; for all others it is proved that it can't."""
    proved: dict[str, Interval]
    """What the program's proof says of its words, the input and delayed copies included."""
    partial_sums: dict[str, int] = field(factory=dict)
    """By the word that a sum writes: no partial sum, in any order of the terms, has a larger magnitude."""
    preset_may_overflow: frozenset[str] = frozenset()
    """The states whose overflow rule can come into play in the preset."""


def analyse(program: Program) -> Analysis:
    """Walk through one sample and find every word that is unknown, unwritten, or too small for what it gets.

    A fault that hides what comes after it ends the walk.
    """
    unsound = _word_faults(program)
    if unsound:
        return Analysis(unsound, frozenset(word.name for word in program.words), {})
    proved = _proved(program)
    known = {word.name: Interval.of_word(word.bits) for word in program.words} | proved
    start = {word.name: known[word.name] for word in program.words if word.role in (Role.INPUT, Role.STATE)}
    words = {word.name: word for word in program.words}
    walk = _Walk(program, words, known, proved, start)
    if walk.through(program.steps) and program.output not in walk.written:
        walk.faults.append(f"the output {program.output} is never written")
    if program.preset is None or walk.faults:
        return Analysis(tuple(walk.faults), frozenset(walk.may_overflow), proved, walk.partial_sums)
    # a preset starts from a reset, and from any input code
    words |= {word.name: word for word in program.preset.words}
    whole = {name: Interval.of_word(word.bits) for name, word in words.items()}
    start = {word.name: Interval(0, 0) for word in program.words if word.role is Role.STATE}
    start |= {name: whole[name] for name in (program.input, program.preset.wanted)}
    preset = _Walk(program, words, whole, {}, start)
    preset.through(program.preset.steps)
    overflowing = frozenset(walk.may_overflow), frozenset(preset.may_overflow)
    return Analysis(tuple(preset.faults), overflowing[0], proved, walk.partial_sums, overflowing[1])


@frozen
class _Walk:
    """One pass through steps; ``ranges`` is what is known of the words that may be read."""

    program: Program
    words: dict[str, Word]
    known: dict[str, Interval]
    proved: dict[str, Interval]
    ranges: dict[str, Interval]
    faults: list[str] = field(factory=list)
    may_overflow: set[str] = field(factory=set)
    written: set[str] = field(factory=set)
    partial_sums: dict[str, int] = field(factory=dict)

    def through(self, steps: Iterable[Step]) -> bool:
        """Whether no step has a fault that hides what comes after it; the walk ends at such a one."""
        for step in steps:
            if not self._names(step):
                return False
            dest = self.words[step.dest]
            if isinstance(step, Sum):
                faults = (
                    _sum_faults(step, self.ranges) + _residue_faults(step, self.program) + _limit_faults(step, dest)
                )
                if faults:
                    self.faults.extend(faults)
                    return False
                reach = sum_range(step, self.ranges)
                self.partial_sums[dest.name], result = reach.magnitude, reach.result
                if dest.name in self.proved:
                    result = self.known[dest.name]
                elif result not in self.known[dest.name]:
                    self.may_overflow.add(dest.name)
                    result = self.known[dest.name]
            else:
                if dest.bits != self.words[step.source].bits:
                    self.faults.append(f"{step.source} and {dest.name} differ in width")
                result = self.ranges[step.source]
            if isinstance(step, Sum) and step.residue is not None:
                residue = self.words[step.residue]
                dropped = Interval(*residue_limits(step.right_shift, step.rounding))
                self.ranges[residue.name] = self.known[residue.name] if residue.role is Role.STATE else dropped
            # A state read later in the same sample may hold the new value, in the next one the old: keep its word.
            self.ranges[dest.name] = self.known[dest.name] if dest.role is Role.STATE else result
        return True

    def _names(self, step: Step) -> bool:
        """Whether the step reads and writes what it may."""
        sources = [term.word for term in step.terms] if isinstance(step, Sum) else [step.source]
        dests = _dests(step)
        missing = [name for name in (*sources, *dests) if name not in self.known]
        unwritten = [name for name in sources if name in self.known and name not in self.ranges]
        self.faults.extend(f"the step that writes {step.dest} uses the unknown word {name}" for name in missing)
        self.faults.extend(f"the step that writes {step.dest} reads {name} before it is written" for name in unwritten)
        if missing or unwritten:
            return False
        for name in dests:
            role = self.words[name].role
            if role is Role.INPUT:
                self.faults.append(f"the input {name} is written")
            if role is not Role.STATE and name in self.written:
                self.faults.append(f"{name} is written twice")
            self.written.add(name)
        return True


def require_valid(program: Program) -> Analysis:
    """The analysis of a valid program.

    :raises Refused: naming every fault.
    """
    analysis = analyse(program)
    if analysis.faults:
        raise Refused(
            Problem(f"program {program.name}", fault, "a program whose sums can't overflow", "narrower coefficients")
            for fault in analysis.faults
        )
    return analysis


def _word_faults(program: Program) -> tuple[str, ...]:
    found = []
    names = [word.name for word in program.words]
    found += [f"the word {name} is declared twice" for name in sorted({n for n in names if names.count(n) > 1})]
    roles = {word.name: word.role for word in program.words}
    for word in program.words:
        widest = WIDEST_INNER if word.role in (Role.STATE, Role.TEMPORARY) else WIDEST_SIGNAL
        if not 2 <= word.bits <= widest:
            found.append(f"the word {word.name} has {word.bits} bits, not 2 to {widest}")
    if roles.get(program.input) is not Role.INPUT:
        found.append(f"the input {program.input} is not an input word")
    if roles.get(program.output) is not Role.OUTPUT:
        found.append(f"the output {program.output} is not an output word")
    computed = {step.dest for step in program.steps if isinstance(step, Sum)}
    written = [name for step in program.steps for name in _dests(step)]
    for entry in program.proof.ranges if program.proof else ():
        if entry.word not in computed or entry.word not in roles:
            found.append(f"the proof speaks of {entry.word}, which no sum writes")
        elif written.count(entry.word) > 1:
            found.append(f"the proof speaks of {entry.word}, which more than one step writes")
        elif Interval(entry.lowest, entry.highest) not in Interval.of_word(program.word(entry.word).bits):
            found.append(f"the range proved of {entry.word} is wider than the word")
        elif not entry.lowest <= 0 <= entry.highest:
            found.append(f"the range proved of {entry.word} is without the 0 of a reset")
    return tuple(found)


def _dests(step: Step) -> tuple[str, ...]:
    """The words that a step writes."""
    residue = step.residue if isinstance(step, Sum) else None
    return (step.dest,) if residue is None else (step.dest, residue)


def _proved(program: Program) -> dict[str, Interval]:
    if program.proof is None:
        return {}
    peak, word = program.proof.peak_code, program.word(program.input)
    found = {word.name: Interval(max(-peak, word.lowest), min(peak, word.highest))}
    found |= {entry.word: Interval(entry.lowest, entry.highest) for entry in program.proof.ranges}
    # A word that a move alone writes holds what its source held, or the 0 of a reset.
    written = [name for step in program.steps for name in _dests(step)]
    copies = [step for step in program.steps if isinstance(step, Move) and written.count(step.dest) == 1]
    known = 0
    while known < len(found):
        known = len(found)
        for step in reversed(copies):
            if step.source in found:
                found[step.dest] = found[step.source]
    return found


def _sum_faults(step: Sum, ranges: dict[str, Interval]) -> list[str]:
    found = []
    if step.accumulator_bits not in ACCUMULATOR_WIDTHS:
        found.append(f"the accumulator of {step.dest} has {step.accumulator_bits} bits, not 32 or 64")
    if not 0 <= step.right_shift <= step.accumulator_bits - 2:
        found.append(f"the sum of {step.dest} is shifted right by {step.right_shift} places")
        return found
    if any(term.shift < 0 for term in step.terms):
        found.append(f"the sum of {step.dest} has a term with a negative shift")
        return found
    if not step.terms:
        found.append(f"the sum of {step.dest} has no terms")
    magnitude = sum_range(step, ranges).magnitude
    if magnitude > (1 << (step.accumulator_bits - 1)) - 1:
        found.append(f"a partial sum of {step.dest} can reach {magnitude}, more than {step.accumulator_bits} bits hold")
    return found


def _limit_faults(step: Sum, dest: Word) -> list[str]:
    if step.limits is None or (
        step.limits[0] < step.limits[1] and Interval(*step.limits) in Interval.of_word(dest.bits)
    ):
        return []
    return [f"the clamp of {step.dest} from {step.limits[0]} to {step.limits[1]} is no range of its word"]


def _residue_faults(step: Sum, program: Program) -> list[str]:
    if step.residue is None:
        return []
    word = program.word(step.residue)
    if word.role is Role.OUTPUT or word.name == step.dest:
        return [f"the residue of {step.dest} goes into {word.name}, which is no word of its own"]
    if step.right_shift == 0:
        return [f"the sum of {step.dest} keeps a residue but drops nothing"]
    if Interval(*residue_limits(step.right_shift, step.rounding)) not in Interval.of_word(word.bits):
        return [f"the residue of {step.dest} needs more than the {word.bits} bits of {word.name}"]
    return []
