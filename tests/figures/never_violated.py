"""Random designs against adversarial inputs: no bound may be exceeded, no word may overflow that was proved not to.

    python tests/figures/never_violated.py --designs 600

Each design: a random family, order 1 to 12, 4 to 10,000 samples per corner period, method, structure, word lengths of 8
to 32 bits, rounding and error feedback; the output full scale is doubled until the proof goes through.  Each input: the
sign patterns that attain the range of each word and the coefficient part of the error, their negatives, steps,
impulses, square waves at each resonance, and noise at full scale and far below.  A slow filter gets longer inputs.

The words are computed by an interpreter of its own, the exact filter by the recursion of its sections in integers of
FRACTION_BITS bits; so is the linear filter that the program would be without its roundings, for the coefficient part.
A violation ends the run with the line that repeats that design alone.
"""

import argparse
import random
import sys
import time
from collections import Counter
from collections.abc import Sequence

import numpy as np
from attrs import frozen
from flint import arb, fmpq
from numpy.typing import NDArray

from afterkick.design import schema
from afterkick.errors import AfterkickError
from afterkick.fixed.bounds import Bounds, bounds
from afterkick.fixed.modal_sums import modal_response, values
from afterkick.fixed.narrow import shift_right
from afterkick.fixed.program import Move, Program, Role, Sum
from afterkick.fixed.structures import build_program
from afterkick.fixed.worst_case import WorstCase
from afterkick.model.blocks import block_factors
from afterkick.model.model import build
from afterkick.sampling import Sampled, sample

Codes = NDArray[np.int64]
Floats = NDArray[np.float64]

STRUCTURES = ("direct", "transposed", "delta", "coupled", "parallel")
METHODS = ("zero-order-hold", "first-order-hold", "impulse-invariant", "bilinear", "matched", "backward-difference")
FRACTION_BITS = 384
"""Sections of order 12 at 10,000 samples per corner period amplify a rounding by less than 2^160."""
SHORTEST, LONGEST = 4096, 32768
"""Samples of a bit-true run."""
LINEAR_LONGEST = 131072
"""Samples for the coefficient part."""
ENOUGH = 0.99
"""Of an absolute sum, what an input of finite length has to cover."""
GOAL = 0.98
BLOCK = 256
NOISES = 32


def random_block(draw: random.Random) -> schema.Block:
    family = draw.choice(("butterworth", "bessel", "chebyshev", "inverse-chebyshev", "elliptic"))
    extra = {}
    if family in ("chebyshev", "elliptic"):
        extra["ripple_db"] = fmpq(draw.choice((1, 5, 10, 30)), 10)
    if family in ("inverse-chebyshev", "elliptic"):
        extra["stop_db"] = fmpq(draw.choice((20, 40, 60)))
    kind = draw.choice((schema.Lowpass, schema.Lowpass, schema.Highpass, schema.Bandpass))
    if kind is schema.Bandpass:
        wide = fmpq(draw.choice((2, 3, 5)), 2)
        return kind(family=family, order=draw.randint(1, 6), low_hz=fmpq(1), high_hz=wide, **extra)
    return kind(family=family, order=draw.randint(1, 12), corner_hz=fmpq(1), **extra)


def random_design(draw: random.Random) -> tuple[Program, Sampled]:
    """The first design that is not refused, with an output full scale that holds its worst input if any does."""
    while True:
        rate = fmpq(round(4 * 2500 ** draw.random()))
        arithmetic = schema.Arithmetic(
            data_bits=draw.choice((8, 10, 12, 16, 16, 24, 32)),
            coefficient_bits=draw.choice((8, 12, 16, 16, 24, 32, 32)),
            structure=draw.choice(STRUCTURES),
            rounding=draw.choice(("nearest", "floor", "even")),
            carry=draw.choice((False, False, 1, 2)),
        )
        try:
            model = build(block_factors(random_block(draw)))
            sampled = sample(model, schema.Sampling(rate_hz=rate, method=draw.choice(METHODS)))
            scale = fmpq(1)
            for _ in range(6):
                signals = schema.Signals(schema.Signal("V", fmpq(1)), schema.Signal("V", scale))
                program = build_program(sampled, arithmetic, signals, "probe")
                if all(word.fits for word in WorstCase(program).ranges):
                    break
                scale *= 2
            return program, sampled
        except AfterkickError:
            continue


# Linear filters without roundings, but for 2^-FRACTION_BITS of a count.


class UnroundedProgram:
    """The program's steps with every rounding left out."""

    def __init__(self, program: Program) -> None:
        self.words = {word.name: 0 for word in program.words}
        self.input, self.output = program.input, program.output
        self.steps = [
            (step.dest, step.source, (), 0)
            if isinstance(step, Move)
            else (step.dest, None, tuple((term.factor, term.word) for term in step.terms), step.right_shift)
            for step in program.steps
        ]

    def run(self, codes: Sequence[int]) -> list[int]:
        """The output in units of 2^-FRACTION_BITS counts; goes on from where the last run ended."""
        words, found = self.words, []
        for code in codes:
            words[self.input] = code << FRACTION_BITS
            for dest, source, terms, shift in self.steps:
                if source is not None:
                    words[dest] = words[source]
                else:
                    words[dest] = sum([factor * words[name] for factor, name in terms]) >> shift
            found.append(words[self.output])
        return found


class ExactFilter:
    """The exact sampled filter, in output codes per input code."""

    def __init__(self, program: Program, sampled: Sampled) -> None:
        scale = program.input_format.full_scale / program.output_format.full_scale
        sections = sampled.sections(FRACTION_BITS)
        self.sections = []
        for index, section in enumerate(sections):
            b = [value * scale if index == 0 else value for value in section.b]
            self.sections.append(([fixed(value) for value in b], [fixed(value) for value in section.a[1:]]))
        self.state = [(0, 0)] * len(sections)

    def run(self, codes: Sequence[int]) -> list[int]:
        """As that of :class:`UnroundedProgram`."""
        found = []
        for code in codes:
            value = code << FRACTION_BITS
            for index, ((b0, b1, b2), (a1, a2)) in enumerate(self.sections):
                s1, s2 = self.state[index]
                answer = ((b0 * value) >> FRACTION_BITS) + s1
                self.state[index] = (
                    ((b1 * value - a1 * answer) >> FRACTION_BITS) + s2,
                    (b2 * value - a2 * answer) >> FRACTION_BITS,
                )
                value = answer
            found.append(value)
        return found


def fixed(value: arb) -> int:
    """The nearest multiple of 2^-FRACTION_BITS to a midpoint."""
    mantissa, exponent = value.mid().man_exp()
    shift = int(exponent) + FRACTION_BITS
    return int(mantissa) << shift if shift >= 0 else (int(mantissa) + (1 << (-shift - 1))) >> -shift


def in_counts(value: int) -> float:
    return float(value / (1 << FRACTION_BITS)) if abs(value) < 1 << 1300 else float("inf")


@frozen(eq=False)
class Pulses:
    """The first samples of the exact filter's pulse response and of what the coefficients add to it."""

    exact: Floats
    error: Floats


def pulses(program: Program, sampled: Sampled, sum_bound: float) -> Pulses:
    """As many samples as cover ENOUGH of ``sum_bound``, or until nothing more comes; LINEAR_LONGEST at most."""
    unrounded, wanted = UnroundedProgram(program), ExactFilter(program, sampled)
    exact: list[float] = []
    error: list[float] = []
    total = 0.0
    while True:
        length = max(SHORTEST, len(exact))
        codes = [0] * length if exact else [1] + [0] * (length - 1)
        true = wanted.run(codes)
        off = [in_counts(one - other) for one, other in zip(unrounded.run(codes), true, strict=True)]
        exact += map(in_counts, true)
        error += off
        more = sum(map(abs, off))
        total += more
        if total >= ENOUGH * sum_bound or more < 1e-4 * total or 2 * len(exact) > LINEAR_LONGEST:
            return Pulses(np.array(exact), np.array(error))


def signs(response: Floats, low: int, high: int) -> Codes:
    """The input that drives the last sample as far up as any can."""
    return np.where(response[::-1] < 0, low, high).astype(np.int64)


def coefficient_reach(program: Program, sampled: Sampled, error: Floats, low: int, high: int) -> float:
    """What the attaining input makes of the difference of the two filters, simulated, in counts."""
    codes = signs(error, low, high).tolist()
    off = UnroundedProgram(program).run(codes)[-1] - ExactFilter(program, sampled).run(codes)[-1]
    return abs(in_counts(off))


# The bit-true runs.


def samples_needed(worst: WorstCase, program: Program) -> int:
    """So many that the output's attaining input covers ENOUGH of the sum, within the limits of a run."""
    response = np.abs(values(modal_response(worst.to_input[program.output]), 4 * LONGEST))
    reached = int(np.searchsorted(np.cumsum(response), ENOUGH * float(np.sum(response)))) + 1
    return min(max(SHORTEST, reached), LONGEST)


def stimuli(program: Program, sampled: Sampled, worst: WorstCase, error: Floats, samples: int, seed: int) -> Codes:
    """One column an input."""
    word, peak = program.word(program.input), worst.peak_code
    low, high = max(-peak, word.lowest), min(peak, word.highest)
    shapes = [values(modal_response(worst.to_input[name]), samples) for name in worst.system.computed]
    shapes.append(np.pad(error[:samples], (0, max(0, samples - len(error)))))
    columns = [signs(shape, low, high) for shape in shapes]
    columns += [signs(-shape, low, high) for shape in shapes]
    n = np.arange(samples)
    for level in (high, low, high // 2, low // 2, high // 8, 1, -1):
        columns += [np.full(samples, level), np.where(n == 0, level, 0), np.where(n < samples // 2, level, 0)]
    for pole in sampled.transfer().poles:
        turn = abs(float(pole.value.log().imag.mid()))
        if not pole.real and turn > 6.3 / samples:
            columns.append(np.where(np.floor(n * turn / np.pi) % 2 == 0, high, low))
    draw = np.random.default_rng(seed)
    columns += list(draw.integers(low, high, size=(NOISES // 2, samples), endpoint=True))
    levels = np.maximum(high >> np.arange(NOISES // 2), 1)[:, None]
    columns += list(draw.integers(-levels, levels, size=(NOISES // 2, samples), endpoint=True))
    return np.column_stack(columns).astype(np.int64)


def run(program: Program, codes: Codes) -> tuple[Codes, dict[str, tuple[int, int]]]:
    """Outputs, and the extremes of every sum before its overflow rule.

    The rule itself is left out: a word that leaves its range is a violation, and up to there nothing differs.
    """
    columns = codes.shape[1]
    words = {word.name: np.zeros(columns, dtype=np.int64) for word in program.words}
    history = {step.dest: np.zeros((BLOCK, columns), dtype=np.int64) for step in program.steps if isinstance(step, Sum)}
    extremes = dict.fromkeys(history, (0, 0))
    outputs = np.empty_like(codes)
    product = np.empty(columns, dtype=np.int64)
    steps = [
        (step, None if isinstance(step, Move) else [(term.factor, term.word) for term in step.terms])
        for step in program.steps
    ]
    for start in range(0, len(codes), BLOCK):
        rows = codes[start : start + BLOCK]
        for n, row in enumerate(rows):
            words[program.input] = row
            for step, terms in steps:
                if isinstance(step, Move):
                    words[step.dest] = words[step.source]
                    continue
                assert terms is not None
                total = words[terms[0][1]] * terms[0][0]
                for factor, name in terms[1:]:
                    np.multiply(words[name], factor, out=product)
                    np.add(total, product, out=total)
                quotient = history[step.dest][n]
                quotient[:] = shift_right(total, step.right_shift, step.rounding)
                if step.residue is not None:
                    words[step.residue] = total - quotient * (1 << step.right_shift)
                words[step.dest] = quotient
            outputs[start + n] = words[program.output]
        for name, found in history.items():
            part = found[: len(rows)]
            low, high = extremes[name]
            extremes[name] = (min(low, int(part.min())), max(high, int(part.max())))
        # the rows of the history are written again: what is kept from sample to sample moves out of them
        for word in program.words:
            if word.role is Role.STATE:
                words[word.name] = words[word.name].copy()
    return outputs, extremes


def largest_error(outputs: Codes, codes: Codes, exact: Floats) -> tuple[float, float]:
    """max |output - exact filter|, and a bound of what the transforms in it lose."""
    samples = len(codes)
    response = np.pad(exact[:samples], (0, max(0, samples - len(exact))))
    length = 2 * samples
    spectrum = np.fft.rfft(response, length)[:, None]
    worst = largest = 0.0
    for start in range(0, codes.shape[1], 16):
        some = codes[:, start : start + 16].astype(np.float64)
        wanted = np.fft.irfft(spectrum * np.fft.rfft(some, length, axis=0), length, axis=0)[:samples]
        worst = max(worst, float(np.max(np.abs(outputs[:, start : start + 16] - wanted))))
        largest = max(largest, float(np.max(np.linalg.norm(some, axis=0))))
    return worst, 20 * np.finfo(np.float64).eps * np.log2(length) * float(np.linalg.norm(response)) * largest


@frozen
class Row:
    """One proved design."""

    word_samples: int
    samples: int
    ranges: tuple[float, ...]
    """Simulated / bound of every word; the output's is ``output``."""
    output: float
    error: float
    coefficients: float
    """Simulated / bound; 1 where both are 0."""
    missing: float
    """Of the coefficient part, bound - simulated, in counts."""
    capped: bool
    """Whether the coefficient part would have needed more than LINEAR_LONGEST samples."""


def judged(program: Program, sampled: Sampled, found: Bounds, seed: int) -> Row:
    """Simulates one proved design.

    :raises AssertionError: for a violated bound.
    """
    assert found.output is not None
    worst = WorstCase(program)
    word = program.word(program.input)
    low, high = max(-worst.peak_code, word.lowest), min(worst.peak_code, word.highest)
    pulse = pulses(program, sampled, found.output.coefficients / worst.peak_code)
    samples = samples_needed(worst, program)
    codes = stimuli(program, sampled, worst, pulse.error, samples, seed)
    outputs, extremes = run(program, codes)
    ranges = {}
    for bound in found.words:
        lowest, highest = extremes[bound.word]
        assert bound.lowest <= lowest, f"{bound.word}: {lowest} below {bound.lowest}"
        assert highest <= bound.highest, f"{bound.word}: {highest} above {bound.highest}"
        assert bound.capacity_low <= lowest, f"{bound.word} overflowed"
        assert highest <= bound.capacity_high, f"{bound.word} overflowed"
        ranges[bound.word] = max(_ratio(lowest, bound.lowest), _ratio(highest, bound.highest))
    error, slack = largest_error(outputs, codes, pulse.exact)
    limit = found.output.coefficients + found.output.rounding
    assert error <= limit + slack, f"output error {error} above {limit} + {slack}"
    reached = coefficient_reach(program, sampled, pulse.error, low, high)
    assert reached <= found.output.coefficients, f"coefficient part {reached} above {found.output.coefficients}"
    last_half = float(np.sum(np.abs(pulse.error[len(pulse.error) // 2 :])))
    capped = 2 * len(pulse.error) > LINEAR_LONGEST and last_half > (1 - ENOUGH) * float(np.sum(np.abs(pulse.error)))
    return Row(
        len(ranges) * codes.size,
        samples,
        tuple(ranges.values()),
        ranges[program.output],
        _ratio(error, limit),
        _ratio(reached, found.output.coefficients),
        found.output.coefficients - reached,
        capped,
    )


def _ratio(simulated: float, bound: float) -> float:
    return simulated / bound if bound else 1.0


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--designs", type=int, default=600)
    parser.add_argument("--first", type=int, default=0, help="number of the first design; two runs can share the work")
    parser.add_argument("--seed", type=int, default=1)
    options = parser.parse_args()
    start = time.monotonic()
    rows: list[Row] = []
    structures: Counter[str] = Counter()
    for number in range(options.first, options.first + options.designs):
        again = f"python tests/figures/never_violated.py --seed {options.seed} --first {number} --designs 1"
        seed = options.seed * 1_000_003 + number
        program, sampled = random_design(random.Random(seed))
        structures[program.structure] += 1
        found = bounds(program, sampled, None)
        what = (
            f"{program.structure}, {len(program.sections)} sections, rate {program.rate_hz}, {program.data_bits} bits"
        )
        if not found.proved:
            print(f"{number:>4} {what}: {found.why_not}", file=sys.stderr, flush=True)
            continue
        try:
            row = judged(program, sampled, found, seed)
        except AssertionError as failure:
            print(f"VIOLATED: {failure}\nagain: {again}")
            sys.exit(1)
        rows.append(row)
        print(
            f"{number:>4} {what}: {row.samples} samples, range {row.output:.3f}, error {row.error:.3f}, "
            f"coefficients {row.coefficients:.4f}{' (capped)' if row.capped else ''}; "
            f"{sum(one.word_samples for one in rows):.3g} word-samples, {time.monotonic() - start:.0f} s",
            file=sys.stderr,
            flush=True,
        )
    report(options.designs, rows, structures)


def report(designs: int, rows: list[Row], structures: Counter[str]) -> None:
    """The figures."""
    print(f"designs {designs}, proved {len(rows)}; {', '.join(f'{k} {v}' for k, v in sorted(structures.items()))}")
    print(f"word-samples {sum(row.word_samples for row in rows):.4g}; nothing violated")
    if not rows:
        return
    table = {
        "range of every word": [ratio for row in rows for ratio in row.ranges],
        "range of the output": [row.output for row in rows],
        "output error": [row.error for row in rows],
        "coefficient part": [row.coefficients for row in rows],
    }
    for name, ratios in table.items():
        print(f"simulated / bound, {name}: median {np.median(ratios):.4f}, lowest {np.min(ratios):.4f}")
    met = sum(row.coefficients >= GOAL for row in rows)
    print(f"coefficient part: {met} of {len(rows)} reach {GOAL} or more")
    print(f"coefficient part: {sum(r.capped for r in rows)} need inputs of more than {LINEAR_LONGEST} samples")
    short = [row.missing for row in rows if row.coefficients < GOAL and not row.capped]
    print(f"coefficient part: {len(short)} others below {GOAL}, by at most {max(short, default=0.0):.2g} counts")


if __name__ == "__main__":
    main()
