"""Random designs against adversarial inputs: no bound may be exceeded, no word may overflow that was proved not to.

``python tests/figures/never_violated.py [--designs 500] [--seed 1] [--samples 4096]``

Each design: a random family, order, rate, method, structure, word length, rounding and error feedback; the output full
scale is doubled until the proof goes through.  Each input: the sign pattern that attains the output's range, the one
that attains the coefficient part of the error, their negatives, full-scale steps, an impulse, square waves at each
resonance and noise.  The words are computed by an interpreter of its own; the exact filter by convolution in float64.
Prints the count of word-samples, and how near the simulated worst comes to each bound.
"""

import argparse
import random
import sys
import time

import numpy as np
from attrs import evolve
from flint import fmpq
from numpy.typing import NDArray

from afterkick.design import schema
from afterkick.errors import AfterkickError
from afterkick.fixed.bounds import Bounds, WorstCase, bounds, worst_input
from afterkick.fixed.exact_response import exact_response
from afterkick.fixed.modal_sums import difference, modal_response, values
from afterkick.fixed.narrow import fit, shift_right
from afterkick.fixed.program import Move, Program
from afterkick.fixed.structures import build_program
from afterkick.model.blocks import block_factors
from afterkick.model.model import build
from afterkick.sampling import Sampled, sample

Codes = NDArray[np.int64]
STRUCTURES = ("direct", "transposed", "delta", "coupled", "parallel")
METHODS = ("zero-order-hold", "first-order-hold", "impulse-invariant", "bilinear", "matched", "backward-difference")


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


def run(program: Program, codes: Codes) -> tuple[Codes, dict[str, tuple[int, int]], set[str]]:
    """Outputs, the extremes of every computed word, and the words that overflowed."""
    zero = np.zeros(codes.shape[1], dtype=np.int64)
    words = {word.name: zero for word in program.words}
    bits = {word.name: word.bits for word in program.words}
    steps = list(program.steps)
    extremes: dict[str, tuple[Codes, Codes]] = {}
    overflowed: set[str] = set()
    outputs = np.empty_like(codes)
    for n, row in enumerate(codes):
        words[program.input] = row
        for step in steps:
            if isinstance(step, Move):
                words[step.dest] = words[step.source]
                continue
            total = sum((term.factor * words[term.word] for term in step.terms[1:]), 0)
            total = total + step.terms[0].factor * words[step.terms[0].word]
            quotient = shift_right(total, step.right_shift, step.rounding)
            if step.residue is not None:
                words[step.residue] = total - quotient * (1 << step.right_shift)
            stored = fit(quotient, bits[step.dest], step.overflow) if bits[step.dest] < 64 else quotient
            if (stored != quotient).any():
                overflowed.add(step.dest)
            words[step.dest] = stored
            low, high = extremes.get(step.dest, (stored, stored))
            extremes[step.dest] = (np.minimum(low, stored), np.maximum(high, stored))
        outputs[n] = words[program.output]
    return outputs, {name: (int(low.min()), int(high.max())) for name, (low, high) in extremes.items()}, overflowed


def stimuli(program: Program, sampled: Sampled, worst: WorstCase, samples: int, seed: int) -> Codes:
    word, peak = program.word(program.input), worst.peak_code
    top = min(peak, word.highest)
    response = worst.to_input[program.output]
    attaining = worst_input(program, response, peak)[-samples:]
    shape = coefficient_error(program, sampled, worst, samples)[::-1]
    splitting = np.where(shape < 0, -peak, top)
    n = np.arange(samples)
    columns = [attaining, -attaining, splitting, -splitting, np.full(samples, top), np.full(samples, -peak)]
    columns.append(np.where(n == 0, top, 0))
    columns.append(np.where(n < samples // 2, top, 0))
    for pole in sampled.transfer().poles:
        turn = abs(float(pole.value.log().imag.mid()))
        if not pole.real and turn > 6.3 / samples:
            columns.append(np.where(np.floor(n * turn / np.pi) % 2 == 0, top, -peak))
    noise = np.random.default_rng(seed).integers(-peak, top, size=(samples, 24), endpoint=True)
    codes = np.column_stack([*columns, noise]).astype(np.int64)
    return np.clip(codes, max(-peak, word.lowest), top)


def exact_values(program: Program, sampled: Sampled, samples: int) -> NDArray[np.float64]:
    scale = program.input_format.full_scale / program.output_format.full_scale
    return values(exact_response(sampled, scale), samples)


def coefficient_error(program: Program, sampled: Sampled, worst: WorstCase, samples: int) -> NDArray[np.float64]:
    scale = program.input_format.full_scale / program.output_format.full_scale
    realised = modal_response(worst.to_input[program.output])
    return values(difference(realised, exact_response(sampled, scale)), samples)


def convolved(response: NDArray[np.float64], codes: Codes) -> NDArray[np.float64]:
    length = 2 * len(response)
    spectrum = np.fft.rfft(response, length)[:, None] * np.fft.rfft(codes.astype(np.float64), length, axis=0)
    found: NDArray[np.float64] = np.fft.irfft(spectrum, length, axis=0)[: len(codes)]
    return found


def judged(
    program: Program, sampled: Sampled, found: Bounds, samples: int, seed: int
) -> tuple[int, float, float, float]:
    """Word-samples, and how much of the output range, the output error and the coefficient part was reached."""
    worst = WorstCase(program)
    codes = stimuli(program, sampled, worst, samples, seed)
    outputs, extremes, overflowed = run(program, codes)
    assert not overflowed, f"{overflowed} overflowed against the proof"
    for word in found.words:
        low, high = extremes[word.word]
        assert word.lowest <= low, f"{word.word}: {low} below {word.lowest}"
        assert high <= word.highest, f"{word.word}: {high} above {word.highest}"
    assert found.output is not None
    wanted = convolved(exact_values(program, sampled, samples), codes)
    # the convolution's own rounding: far above what a float64 transform of this length loses
    slack = 1e-11 * worst.peak_code * float(np.sum(np.abs(exact_values(program, sampled, samples)))) * 16
    error = float(np.max(np.abs(outputs - wanted)))
    bound = found.output.coefficients + found.output.rounding
    assert error <= bound + slack, f"output error {error} above {bound}"
    part = float(np.sum(np.abs(coefficient_error(program, sampled, worst, samples)))) * worst.peak_code
    output = next(word for word in found.words if word.word == program.output)
    reach = max(extremes[program.output][1] / output.highest, extremes[program.output][0] / output.lowest)
    computed = len(found.words) * codes.size
    return computed, reach, error / bound if bound else 1.0, part / found.output.coefficients if part else 1.0


def main() -> None:
    arguments = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    arguments.add_argument("--designs", type=int, default=500)
    arguments.add_argument("--seed", type=int, default=1)
    arguments.add_argument("--samples", type=int, default=4096)
    options = arguments.parse_args()
    start = time.monotonic()
    total, proved = 0, 0
    rows = []
    counts: dict[str, int] = {}
    for k in range(options.designs):
        seed = options.seed * 1_000_003 + k
        program, sampled = random_design(random.Random(seed))
        counts[program.structure] = counts.get(program.structure, 0) + 1
        try:
            found = bounds(program, evolve(sampled), None)
            if found.proved:
                proved += 1
                samples, *ratios = judged(program, sampled, found, options.samples, seed)
                total += samples
                rows.append(ratios)
        except AssertionError as failure:
            print(f"VIOLATED: {failure}; again: --designs 1 --seed-exact {seed} ({program.structure})")
            sys.exit(1)
        if (k + 1) % 25 == 0:
            print(
                f"{k + 1} designs, {proved} proved, {total:.3g} word-samples, {time.monotonic() - start:.0f} s",
                flush=True,
            )
    print(f"designs {options.designs}, proved {proved}, structures {counts}")
    print(f"word-samples {total:.4g}; nothing violated; {time.monotonic() - start:.0f} s")
    table = np.array(rows)
    for name, column in zip(("output range", "output error", "coefficient part"), table.T, strict=True):
        print(f"reached of the bound, {name}: median {np.median(column):.4f}, lowest {np.min(column):.4f}")


if __name__ == "__main__":
    main()
