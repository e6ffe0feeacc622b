"""Random designs with error feedback, and relaxed ones; a transposed section by hand."""

from functools import cache
from itertools import count, islice

import numpy as np
from attrs import evolve
from flint import fmpq
from numpy.typing import NDArray

from afterkick.errors import Refused
from afterkick.fixed import Program
from afterkick.fixed.carry import with_carry
from afterkick.fixed.program import Move, Overflow, ProgramSection, Role, Rounding, Sum, Term, Word
from afterkick.fixed.relax import relax
from afterkick.fixed.worst_case import WorstCase
from fixed.random_designs import program_of, random_codes, random_program


def carried_program(seed: int) -> Program | None:
    """The random design of this seed with error feedback of order 1 (even seeds) or 2; None without feedback."""
    program = random_program(seed)
    carried = with_carry(program, 1 + seed % 2)
    return carried if len(program.sections) <= 2 and carried is not program else None


def carried_widths(program: Program) -> set[int]:
    """Of the accumulators with error feedback."""
    return {step.accumulator_bits for step in program.steps if isinstance(step, Sum) and step.residue}


def promising(program: Program, peak_code: int) -> Program:
    """The program with a promised peak of so many codes."""
    peak = program.input_format.full_scale * fmpq(peak_code, 1 << (program.data_bits - 1))
    return evolve(program, input_format=evolve(program.input_format, peak=peak))


def provable(program: Program) -> Program | None:
    """The program with the largest promised peak for which no word overflows; None where there is none."""
    full = WorstCase(promising(program, 1 << (program.data_bits - 1)))
    peaks = [
        (min(-word.capacity_low, word.capacity_high) - word.from_rounding) / word.from_input * full.peak_code
        for word in full.ranges
        if word.from_input
    ]
    peak = min(full.peak_code, int(0.999 * min(peaks)))
    return promising(program, peak) if peak >= 4 else None


@cache
def relaxed_programs(number: int) -> list[tuple[int, Program, Program]]:
    """Seed, the design with error feedback, and the same relaxed."""

    def found():
        for seed in count():
            carried = carried_program(seed)
            # three of four with a sum in 32 bits, where the feedback can be folded
            if carried is None or not (seed % 4 == 0 or 32 in carried_widths(carried)):
                continue
            program = provable(carried)
            if program is None:
                continue
            try:
                after = relax(program, WorstCase(program).ranges)
            except Refused:
                continue
            if after is not program:
                yield seed, program, after

    return list(islice(found(), number))


def codes_within(program: Program, seed: int) -> NDArray[np.int64]:
    """Random and adversarial codes, those beyond the promised peak cut to it."""
    peak = WorstCase(program).peak_code
    limits = program.word(program.input)
    return np.clip(random_codes(program, seed), max(-peak, limits.lowest), min(peak, limits.highest))


def transposed(b: tuple[int, int, int], a: tuple[int, int, int], shift: int, **options: object) -> Program:
    """A section in transposed form with exact 31-bit states: y = (s1 + b0 x) >> shift, and then the states."""
    model = program_of(([0.5], []))
    rounding = Rounding(options.get("rounding", "nearest"))

    def total(dest: str, terms: list[Term], places: int) -> Sum:
        return Sum(dest, tuple(t for t in terms if t.coefficient), 32, places, rounding, Overflow.SATURATE)

    words = (
        Word("x", 16, 15, Role.INPUT),
        Word("y", 16, 15, Role.OUTPUT),
        Word("s1", 31, 15 + shift, Role.STATE),
        Word("s2", 31, 15 + shift, Role.STATE),
    )
    steps: tuple[Sum | Move, ...] = (
        total("y", [Term(b[0], "x"), Term(1, "s1")], shift),
        total("s1", [Term(b[1], "x"), Term(-a[1], "y"), Term(1, "s2")], 0),
        total("s2", [Term(b[2], "x"), Term(-a[2], "y")], 0),
    )
    section = ProgramSection(words, steps, "x", "y", b, shift, a, shift, ())
    return evolve(model, structure="transposed", rounding=rounding, sections=(section,))
