"""What a proof of the word ranges saves: idle saturation, wide sums, and the cost of error feedback.

Saturation.  A word that can't overflow needs no check.  The proved ranges become part of the program: the analysis of
its sums builds on them, the C leaves the checks out, and the simulator refuses a run that contradicts them.

Width.  A proved word, and a sum of proved words, may fit 32 bits where any words of their width would need more.

Error feedback.  What a sum S dropped is S - 2^q y, as long as y is not saturated.  Where it comes back in a later
sample, S itself is kept and carried over, and 2^q is taken from the coefficient of that y: the same integers, without
cutting the residue out.  With saturation the excess would be carried too, and grow without limit: hence the proof.
In 64 bits a sum costs as much to keep as its residue to cut out, so there it stays.

The price: for inputs beyond the promised peak, or from a state that no run reaches, a sum may overflow.
"""

from collections.abc import Iterable, Iterator
from functools import cached_property
from math import ceil, floor, isfinite

from attrs import evolve, frozen

from afterkick.errors import Problem, Refused
from afterkick.fixed.narrow import residue_limits
from afterkick.fixed.program import (
    Move,
    Program,
    Proof,
    ProvedRange,
    Role,
    Step,
    Sum,
    Term,
    Word,
    dependencies,
    with_accumulator,
)
from afterkick.fixed.ranges import Interval, analyse, require_valid
from afterkick.fixed.remedies import scale_remedies
from afterkick.fixed.worst_case import WordRange, WorstCase

__all__ = ["Relaxation", "relax"]

NARROW = 32
LONGEST_CARRY = 2
"""Samples over which what a sum dropped may come back."""

Ranges = dict[str, Interval]


def relax(program: Program, ranges: tuple[WordRange, ...]) -> Program:
    """``program`` without the saturation and the width that ``ranges`` prove idle, its error feedback folded away.

    ``ranges`` are :attr:`afterkick.fixed.worst_case.WorstCase.ranges` of this program.  A word is proved
    where neither it nor any word that has an influence on it can overflow, by these or by interval arithmetic.  The
    result gives the same outputs, integer for integer, for all inputs within the promised peak; others are not accepted
    any more.  A sum whose error feedback can't be folded, because the sum needs 64 bits or the carried one would not
    fit 32, keeps it as it is.  A program that has nothing to save is returned as it is, and so is one with a preset,
    which starts from other states than a reset.  See :class:`Relaxation` for what was saved.

    :raises Refused: where nothing is saved because words may overflow, naming them and the key ``arithmetic.relax``;
        for a program that is not valid.
    """
    may_overflow = require_valid(program).may_overflow
    if program.preset is not None:
        return program
    proved = _proved_ranges(program, ranges)
    found = _in_narrow_sums(_in_narrow_words(_with_proof(program, proved)))
    for step in [step for step in found.steps if isinstance(step, Sum) and step.residue and step.dest in proved]:
        for fold in _folds(found, step, proved):
            candidate = _with_proof(fold.program, proved | fold.ranges)
            if not analyse(candidate).faults:
                found, proved = candidate, proved | fold.ranges
                break
    if may_overflow != analyse(found).may_overflow or found.sections != program.sections:
        return found
    overflowing = [entry for entry in ranges if not entry.fits]
    if overflowing:
        cures = scale_remedies(overflowing, program)
        raise Refused(
            Problem(
                "arithmetic.relax",
                f"nothing can be relaxed, as words may overflow: {', '.join(map(_filled, overflowing))}",
                "words that hold whatever the promised peak brings",
                "; ".join([*cures, "or relax = false"]) if cures else "relax = false",
            )
        )
    return program


def _filled(entry: WordRange) -> str:
    extent = f"up to {100 * entry.filling:.6g} % of it" if isfinite(entry.filling) else "without limit"
    return f"{entry.word} ({extent})"


@frozen(eq=False)
class Relaxation:
    """A program before and after :func:`relax`: what was saved, and what had to stay."""

    before: Program
    after: Program

    @cached_property
    def unchecked(self) -> tuple[str, ...]:
        """Words that may overflow by what their type holds, and are proved not to."""
        left = analyse(self.after).may_overflow
        doubted = analyse(self.before).may_overflow - left
        return tuple(word.name for word in self.before.words if word.name in doubted)

    @cached_property
    def checked(self) -> tuple[str, ...]:
        """Words that keep their overflow rule, as they are not proved."""
        doubted = analyse(self.after).may_overflow
        return tuple(word.name for word in self.after.words if word.name in doubted)

    @cached_property
    def narrowed(self) -> tuple[str, ...]:
        """Words whose sums take 32 bits instead of 64."""
        return tuple(name for name in _wide(self.before) if name not in self.wide)

    @cached_property
    def shortened(self) -> tuple[str, ...]:
        """Words of 32 bits that had more."""
        bits = {word.name: word.bits for word in self.after.words}
        return tuple(word.name for word in self.before.words if word.bits > bits.get(word.name, word.bits))

    @cached_property
    def wide(self) -> tuple[str, ...]:
        """Words whose sums still take 64 bits."""
        return _wide(self.after)

    @cached_property
    def folded(self) -> tuple[str, ...]:
        """Words whose error feedback is in a coefficient now."""
        return tuple(name for name in _fed_back(self.before) if name not in _fed_back(self.after))

    @cached_property
    def carried(self) -> tuple[str, ...]:
        """Words whose error feedback could not be folded."""
        return _fed_back(self.after)


def _wide(program: Program) -> tuple[str, ...]:
    return tuple(step.dest for step in program.steps if isinstance(step, Sum) and step.accumulator_bits > NARROW)


def _fed_back(program: Program) -> tuple[str, ...]:
    return tuple(step.dest for step in program.steps if isinstance(step, Sum) and step.residue is not None)


def _proved_ranges(program: Program, ranges: tuple[WordRange, ...]) -> Ranges:
    computed = [step.dest for step in program.steps if isinstance(step, Sum)]
    # What a clamp holds back does not respond as the ranges of the words behind it take it to.
    clamped = {step.dest for step in program.steps if isinstance(step, Sum) and step.limits is not None}
    fitting = {entry.word: Interval(ceil(entry.lowest), floor(entry.highest)) for entry in ranges if entry.fits}
    doubtful = clamped | set(computed) - set(fitting)
    return {name: fitting[name] for name in computed if not doubtful & dependencies(program, [name])}


def _with_proof(program: Program, proved: Ranges) -> Program:
    computed = [step.dest for step in program.steps if isinstance(step, Sum)]
    listed = (ProvedRange(name, proved[name].lowest, proved[name].highest) for name in computed if name in proved)
    return evolve(program, proof=Proof(WorstCase(program).peak_code, tuple(listed)))


def _in_narrow_words(program: Program) -> Program:
    narrow, ranges = Interval.of_word(NARROW), analyse(program).proved

    def fitted(word: Word) -> Word:
        return evolve(word, bits=NARROW) if word.bits > NARROW and ranges.get(word.name) in narrow else word

    sections = (evolve(section, words=tuple(map(fitted, section.words))) for section in program.sections)
    candidate = evolve(program, sections=tuple(sections))
    return program if analyse(candidate).faults else candidate


def _in_narrow_sums(program: Program) -> Program:
    wide = [step for step in program.steps if isinstance(step, Sum) and step.accumulator_bits > NARROW]
    for step in wide:
        if all(program.word(term.word).bits <= NARROW for term in step.terms):
            candidate = with_accumulator(program, step.dest, NARROW)
            program = program if analyse(candidate).faults else candidate
    return program


@frozen
class _Fold:
    """A program in which one sum is carried over whole, and the ranges of the words that this touches."""

    program: Program
    ranges: Ranges


@frozen
class _Feedback:
    """The error feedback of one sum."""

    program: Program
    index: int
    """Of the sum among the program's steps."""
    factors: dict[int, int]
    """By age in samples: of what the sum dropped then."""
    words: frozenset[str]
    """That hold what the sum dropped; nothing else reads them."""

    @property
    def step(self) -> Sum:
        """The sum."""
        step = list(self.program.steps)[self.index]
        assert isinstance(step, Sum)
        return step

    @property
    def total(self) -> str:
        """A new word for the sum before its shift."""
        return f"total_{self.step.dest}"

    @property
    def dropped(self) -> Interval:
        """What one residue can be."""
        return Interval(*residue_limits(self.step.right_shift, self.step.rounding))

    def total_range(self, result: Interval) -> Interval:
        """Of the sum, given that of its result."""
        shift, dropped = self.step.right_shift, self.dropped
        return Interval((result.lowest << shift) + dropped.lowest, (result.highest << shift) + dropped.highest)

    def split(self, terms: tuple[Term, ...]) -> tuple[Sum, Sum]:
        """The sum without its shift, and the shift."""
        exact = evolve(self.step, dest=self.total, terms=terms, right_shift=0, residue=None)
        return exact, evolve(self.step, terms=(Term(1, self.total),), residue=None)

    def less_result(self, terms: tuple[Term, ...], word: str, age: int) -> tuple[Term, ...]:
        """The terms, with 2^right_shift times the feedback's factor taken from the coefficient of ``word``."""
        amount = self.factors[age] << self.step.right_shift
        exponent = abs(amount).bit_length() - 1
        size = f"2^{exponent}" if abs(amount) == 1 << exponent else str(abs(amount))
        note = f"{'less' if amount > 0 else 'plus'} {size} for the sum that is carried over"
        old = next((term for term in terms if term.word == word), Term(0, word))
        new = evolve(old, coefficient=old.factor - amount, shift=0, note=note)
        changed = tuple(new if term is old else term for term in terms)
        return tuple(term for term in (changed if old in terms else (*changed, new)) if term.coefficient)


def _folds(program: Program, step: Sum, proved: Ranges) -> Iterator[_Fold]:
    """Ways to fold the error feedback of ``step``, whose result never overflows."""
    feedback = _feedback(program, step) if step.accumulator_bits == NARROW else None
    if feedback is not None:
        yield from _over_own_sum(feedback, proved)
        yield from _over_states(feedback, proved)


def _feedback(program: Program, step: Sum) -> _Feedback | None:
    """None where what the sum drops goes elsewhere too, or comes back too late."""
    steps = list(program.steps)
    index = steps.index(step)
    words = {str(step.residue)}
    for move in [move for move in steps if isinstance(move, Move)] * LONGEST_CARRY:
        if move.source in words:
            words.add(move.dest)
    ages = _ages(program, str(step.residue))[index]
    factors = {}
    for term in step.terms:
        if term.word in words:
            if term.word not in ages or ages[term.word] in factors:
                return None
            factors[ages[term.word]] = term.factor
    inside = {i for i, move in enumerate(steps) if isinstance(move, Move) and move.dest in words}
    if any(words & _read(other) for i, other in enumerate(steps) if i != index and i not in inside):
        return None
    return _Feedback(program, index, factors, frozenset(words)) if factors else None


def _over_own_sum(feedback: _Feedback, proved: Ranges) -> Iterator[_Fold]:
    """Direct form: the sum reads its own past results, and so reads its own past sums beside them."""
    program, step, total = feedback.program, feedback.step, feedback.total
    results = {age: word for word, age in _ages(program, step.dest)[feedback.index].items() if age}
    if not set(feedback.factors) <= set(results):
        return
    terms = tuple(term for term in step.terms if term.word not in feedback.words)
    for age in feedback.factors:
        terms = feedback.less_result(terms, results[age], age)
    past = [f"{total}_{age}" for age in range(1, max(feedback.factors) + 1)]
    terms += tuple(Term(factor, past[age - 1]) for age, factor in feedback.factors.items())
    moves = [Move(dest, source) for dest, source in reversed(list(zip(past, [total, *past], strict=False)))]
    limits = feedback.total_range(proved[step.dest])
    yield _Fold(_rebuilt(feedback, {feedback.index: (*feedback.split(terms), *moves)}, past), {total: limits})


def _over_states(feedback: _Feedback, proved: Ranges) -> Iterator[_Fold]:
    """Transposed form: an exact state, which the sum reads in the next sample, takes the sum along."""
    program, step = feedback.program, feedback.step
    steps = list(program.steps)
    changed: dict[int, tuple[Step, ...]] = {
        feedback.index: feedback.split(tuple(term for term in step.terms if term.word not in feedback.words))
    }
    ranges = {feedback.total: feedback.total_range(proved[step.dest])}
    reader = feedback.index
    for age in range(1, max(feedback.factors) + 1):
        writer = _exact_state(program, reader)
        if writer is None:
            return
        state = steps[writer]
        assert isinstance(state, Sum)
        if state.dest not in proved:
            return
        if age in feedback.factors:
            terms = feedback.less_result(state.terms, step.dest, age)
            changed[writer] = (evolve(state, terms=(*terms, Term(feedback.factors[age], feedback.total))),)
        old = proved[state.dest]
        ends = [
            (factor * feedback.dropped.lowest, factor * feedback.dropped.highest)
            for later, factor in feedback.factors.items()
            if later >= age
        ]
        lowest, highest = old.lowest + sum(map(min, ends)), old.highest + sum(map(max, ends))
        ranges[state.dest] = Interval(lowest, highest)
        reader = writer
    yield _Fold(_rebuilt(feedback, changed, []), ranges)


def _exact_state(program: Program, reader: int) -> int | None:
    """The sum without a shift that writes a state after ``reader``, which alone reads that state, has read it."""
    steps = list(program.steps)
    summed = steps[reader]
    assert isinstance(summed, Sum)
    for word in (term.word for term in summed.terms if term.factor == 1):
        writers = [i for i, step in enumerate(steps) if step.dest == word]
        readers = [i for i, step in enumerate(steps) if word in _read(step)]
        if program.word(word).role is Role.STATE and readers == [reader] and len(writers) == 1 and writers[0] > reader:
            writer = steps[writers[0]]
            if isinstance(writer, Sum) and writer.right_shift == 0:
                return writers[0]
    return None


def _read(step: Step) -> set[str]:
    return {term.word for term in step.terms} if isinstance(step, Sum) else {step.source}


def _ages(program: Program, name: str) -> list[dict[str, int]]:
    """For each step, the words that hold what ``name`` was given before, and how many samples ago that was."""
    written: dict[str, int] = {}
    found: list[dict[str, int]] = []
    for n in range(LONGEST_CARRY + 2):
        found = []
        for step in program.steps:
            found.append({word: n - sample for word, sample in written.items()})
            if isinstance(step, Sum):
                for word in (step.dest, step.residue):
                    if word == name:
                        written[name] = n
            elif step.source in written:
                written[step.dest] = written[step.source]
    return [{word: age for word, age in ages.items() if program.word(word).role is Role.STATE} for ages in found]


def _rebuilt(feedback: _Feedback, changed: dict[int, tuple[Step, ...]], past: Iterable[str]) -> Program:
    """The program with some of its steps replaced and the words of the residue gone."""
    program, step = feedback.program, feedback.step
    fraction_bits = program.word(step.dest).fraction_bits + step.right_shift
    new = [Word(feedback.total, step.accumulator_bits, fraction_bits, Role.TEMPORARY)]
    new += [Word(name, step.accumulator_bits, fraction_bits, Role.STATE) for name in past]
    index = 0
    sections = []
    for section in program.sections:
        steps: list[Step] = []
        words = [word for word in section.words if word.name not in feedback.words]
        for old in section.steps:
            if index == feedback.index:
                words += new
            if not (isinstance(old, Move) and old.dest in feedback.words):
                steps += changed.get(index, (old,))
            index += 1
        sections.append(evolve(section, words=tuple(words), steps=tuple(steps)))
    return evolve(program, sections=tuple(sections))
