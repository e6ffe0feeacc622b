"""The word-length trap: a slow second-order low-pass in 16-bit data, at 10 to 10,000 samples per corner period.

    python tests/figures/word_length_trap.py [METHOD]

One table for each structure with 16- and 32-bit coefficients, direct and transposed also with error feedback of order 1
and 2.  The columns: DC gain error of the integers; peak impulse error of their coefficients relative to the peak of the
exact sampled filter, before any rounding of signals; the bound of what the output shows long after the input has gone,
and what steps of several sizes leave in the simulation; the bound of how far such a step settles from the DC gain times
the input, and what is simulated of that, with a ~ where it was not periodic yet.  All but the first two in counts.

Then the naive direct form, everything rounded to 14 fraction bits, for comparison; and for each rate the cheapest one
with an exact DC gain, at most one count left (bound) and an impulse error below 0.1 %, and the cheapest one that
leaves nothing; or what keeps each one from it.  Ends with 1 if a rate has none.
"""

import sys
from collections.abc import Iterator

import numpy as np
from attrs import frozen
from flint import fmpq

from afterkick.design.schema import Arithmetic, Lowpass, Sampling, Signal, Signals
from afterkick.errors import Refused
from afterkick.fixed.exact_response import exact_response
from afterkick.fixed.modal_sums import difference, modal_response, values
from afterkick.fixed.program import Program
from afterkick.fixed.settled import settled_offsets, step_codes
from afterkick.fixed.simulate import trace
from afterkick.fixed.structures import build_program, operations
from afterkick.fixed.worst_case import WorstCase
from afterkick.model.blocks import block_factors
from afterkick.model.model import build
from afterkick.numbers import nearest_float
from afterkick.sampling import Sampled, sample

RATIOS = (10, 20, 50, 100, 200, 500, 1000, 2000, 5000, 10000)
STRUCTURES = ("direct", "transposed", "delta", "coupled", "parallel")
FED_BACK = ("direct", "transposed")
SIGNALS = Signals(Signal("V", fmpq(1), fmpq(3, 4)), Signal("V", fmpq(1)))
"""Equal scales, so that a DC gain of 1 is 1 in codes; the output holds the overshoot of the worst input."""
IMPULSE_GOAL = 1e-3
REST_GOAL = 1
SETTLING_PERIODS = 4
"""Of the corner: a second-order Butterworth step has faded from full scale to a hundredth of a count after 3."""
WORK = 100_000_000
NAIVE_BITS = 14


@frozen
class Row:
    """One realisation."""

    name: str
    operations: int
    gain_ppm: float
    gain_exact: bool
    impulse_error: float
    rest_bound: int
    left: int
    """The largest output that a simulated step leaves after it has ended."""
    settled_bound: float
    settled: float
    periodic: bool
    overflowed: bool
    """Whether a word did in the simulation."""

    @property
    def lacking(self) -> list[str]:
        """What keeps it from being good enough."""
        found = [] if self.gain_exact else [f"DC gain off by {self.gain_ppm:.3g} ppm"]
        if self.impulse_error >= IMPULSE_GOAL:
            found.append(f"impulse error {100 * self.impulse_error:.2g} %")
        if self.overflowed:
            found.append("a word overflows")
        if self.rest_bound > REST_GOAL:
            found.append(f"up to {self.rest_bound} counts left")
        return found


def low_pass(ratio: int, method: str) -> Sampled:
    """Butterworth, corner at 1 Hz."""
    model = build(block_factors(Lowpass(family="butterworth", order=2, corner_hz=fmpq(1))))
    return sample(model, Sampling(rate_hz=fmpq(ratio), method=method))


def variants() -> Iterator[tuple[str, Arithmetic]]:
    """Every realisation, with its name."""
    for structure in STRUCTURES:
        for carry in (0, 1, 2) if structure in FED_BACK else (0,):
            for bits in (16, 32):
                name = f"{structure}, {bits}-bit coefficients" + (f", carry {carry}" if carry else "")
                yield name, Arithmetic(coefficient_bits=bits, structure=structure, carry=carry)


def impulse_error(worst: WorstCase, sampled: Sampled, ratio: int) -> float:
    """max |h_q - h_d| / max |h_d| in double precision, over SETTLING_PERIODS."""
    program = worst.program
    exact = exact_response(sampled, program.input_format.full_scale / program.output_format.full_scale)
    samples = SETTLING_PERIODS * ratio
    off = values(difference(modal_response(worst.to_input[program.output]), exact), samples)
    return float(np.max(np.abs(off)) / np.max(np.abs(values(exact, samples))))


def stepped(program: Program, codes: tuple[int, ...], ratio: int) -> tuple[int, bool]:
    """The largest output in the last half of the time after steps and impulses, and whether a word overflowed."""
    length = SETTLING_PERIODS * ratio
    inputs = np.zeros((3 * length, 2 * len(codes)), dtype=np.int64)
    inputs[:length, : len(codes)] = inputs[0, len(codes) :] = codes
    run = trace(program, inputs)
    return int(np.max(np.abs(run.outputs[-length:]))), any(run.overflows.values())


def judged(name: str, arithmetic: Arithmetic, sampled: Sampled, ratio: int) -> Row:
    """One realisation.

    :raises Refused: where there is none.
    """
    program = build_program(sampled, arithmetic, SIGNALS, "trap")
    worst = WorstCase(program)
    total = worst.to_input[program.output].total
    assert total is not None
    codes = step_codes(program, worst.peak_code)
    steps = settled_offsets(program, sampled, worst.rounding_span, codes, WORK)
    left, overflowed = stepped(program, codes, ratio)
    proved = all(word.fits for word in worst.ranges)
    assert not (proved and overflowed)
    return Row(
        name,
        operations(program),
        1e6 * nearest_float(total - 1),
        total == 1,
        impulse_error(worst, sampled, ratio),
        int(max(-worst.rounding_span[0], worst.rounding_span[1])),
        left,
        max(step.largest for step in steps),
        max(abs(x) for step in steps for x in (step.simulated_lowest, step.simulated_highest)),
        all(step.simulated.period is not None for step in steps),
        overflowed,
    )


def naive_integers(sampled: Sampled) -> tuple[list[int], list[int]]:
    """b and a of the one section, each rounded to NAIVE_BITS fraction bits."""
    section = sampled.sections(80)[0]
    b, a = ([round(float(value.mid()) * 2**NAIVE_BITS) for value in group] for group in (section.b, section.a))
    return b, a


def naive_dc_gain(b: list[int], a: list[int]) -> float:
    """Infinite with a pole at z = 1, and 0 where the filter is silent."""
    if not any(b):
        return 0.0
    return sum(b) / sum(a) if sum(a) else float("inf")


def heading() -> str:
    return (
        f"{'rate/corner':>12} {'DC gain ppm':>12} {'impulse %':>10} {'at rest <=':>11} {'left':>6} "
        f"{'settled <=':>11} {'settled':>9} {'operations':>11}"
    )


def line(ratio: int, row: Row) -> str:
    settled = "overflow" if row.overflowed else f"{row.settled:.4g}{'' if row.periodic else '~'}"
    return (
        f"{ratio:>12} {row.gain_ppm:>12.3g} {100 * row.impulse_error:>10.2g} {row.rest_bound:>11} {row.left:>6} "
        f"{row.settled_bound:>11.4g} {settled:>9} {row.operations:>11}"
    )


def cheapest(rows: list[Row]) -> str:
    """The cheapest that is good enough, and the cheapest that leaves nothing; empty where there is none."""
    good = sorted((row for row in rows if not row.lacking), key=lambda row: row.operations)
    found = [f"{row.name} ({row.operations} operations, {row.rest_bound} left at most)" for row in good[:1]]
    silent = [row for row in good if row.rest_bound == 0]
    if silent and silent[0] is not good[0]:
        found.append(f"nothing left: {silent[0].name} ({silent[0].operations} operations)")
    return "; ".join(found)


def main() -> int:
    method = sys.argv[1] if len(sys.argv) > 1 else "bilinear"
    filters = {ratio: low_pass(ratio, method) for ratio in RATIOS}
    found: dict[int, list[Row]] = {ratio: [] for ratio in RATIOS}
    refused: dict[int, list[str]] = {ratio: [] for ratio in RATIOS}
    for name, arithmetic in variants():
        print(f"\n{name}, 16-bit data, {method}\n{heading()}")
        for ratio, sampled in filters.items():
            try:
                row = judged(name, arithmetic, sampled, ratio)
            except Refused as refusal:
                refused[ratio].append(f"{name}: {refusal.problems[0].found}")
                print(f"{ratio:>12} refused: {refusal.problems[0].found}", flush=True)
            else:
                found[ratio].append(row)
                print(line(ratio, row), flush=True)
    print(f"\nnaive direct form, {NAIVE_BITS} fraction bits")
    for ratio, sampled in filters.items():
        b, a = naive_integers(sampled)
        print(f"{ratio:>12} b {b}, a {a}: DC gain {naive_dc_gain(b, a):.4g}{'' if any(b) else ' (silent)'}")
    print(f"\nexact DC gain, at most {REST_GOAL} count left, impulse error below {100 * IMPULSE_GOAL:g} %")
    missing = 0
    for ratio, rows in found.items():
        best = cheapest(rows)
        print(f"{ratio:>12} {best or 'NONE'}")
        if not best:
            missing += 1
            reasons = [f"{row.name}: {'; '.join(row.lacking)}" for row in rows] + refused[ratio]
            print("\n".join(f"{'':>12} not {reason}" for reason in reasons))
    return 1 if missing else 0


if __name__ == "__main__":
    sys.exit(main())
