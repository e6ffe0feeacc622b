"""The word-length trap: a slow second-order low-pass in 16-bit data, from 10 to 10,000 samples per corner period.

``python tests/figures/word_length_trap.py`` prints a table a structure.  Each row: DC gain error, peak impulse error of
the rounded coefficients against the exact sampled filter (before output rounding), the bound of what the output shows
long after the input has gone, what a simulation leaves after a full-scale step has ended, and the settled error of that
step.  The last lines are the naive direct form: everything rounded to 14 fraction bits, for comparison.
"""

import sys

import numpy as np
from flint import fmpq

from afterkick.design.schema import Arithmetic, Lowpass, Sampling, Signal, Signals
from afterkick.errors import Refused
from afterkick.fixed.bounds import WorstCase
from afterkick.fixed.choice import choice_report
from afterkick.fixed.direct import direct_program
from afterkick.fixed.program import Program, quantised_dc_gain
from afterkick.fixed.simulate import simulate
from afterkick.model.blocks import block_factors
from afterkick.model.model import build
from afterkick.numbers import fraction
from afterkick.sampling import Sampled, sample

RATIOS = (10, 20, 50, 100, 200, 500, 1000, 2000, 5000, 10000)
CHOICES = {
    "16-bit coefficients": Arithmetic(coefficient_bits=16),
    "32-bit coefficients": Arithmetic(coefficient_bits=32),
    "32-bit coefficients, carry 1": Arithmetic(coefficient_bits=32, carry=1),
    "32-bit coefficients, carry 2": Arithmetic(coefficient_bits=32, carry=2),
}
SIGNALS = Signals(Signal("V", fmpq(1)), Signal("V", fmpq(5, 4)))
"""The output holds the overshoot of the worst input."""


def exact(ratio: int, method: str) -> Sampled:
    model = build(block_factors(Lowpass(family="butterworth", order=2, corner_hz=fmpq(1))))
    return sample(model, Sampling(rate_hz=fmpq(ratio), method=method))


def left_and_settled(program: Program, ratio: int) -> tuple[int, float]:
    """Counts left after a full-scale step has ended, and the error of its settled value, both simulated."""
    settle = 4 * ratio
    step = np.zeros(3 * settle, dtype=np.int64)
    step[:settle] = 32767
    output = simulate(program, step)
    wanted = 32767 * fraction(program.input_format.full_scale / program.output_format.full_scale)
    return int(np.max(np.abs(output[-settle // 2 :]))), float(output[settle - 1] - wanted)


def row(sampled: Sampled, arithmetic: Arithmetic, ratio: int) -> str:
    try:
        program = direct_program(sampled, arithmetic, SIGNALS, "trap")
    except Refused as refusal:
        return f"refused: {refusal.problems[0].found}"
    gain = quantised_dc_gain(program)
    assert gain is not None
    report = choice_report(program, sampled)
    worst = WorstCase(program)
    output = next(word for word in worst.ranges if word.word == program.output)
    left, settled = left_and_settled(program, ratio)
    return (
        f"{1e6 * float(fraction(gain - 1)):>10.3g} ppm {100 * report.chosen_error:>10.2g} % "
        f"{output.from_rounding:>12.3g} {left:>8} {settled:>10.1f}"
    )


def naive(ratio: int) -> str:
    """b and a rounded to 14 fraction bits each."""
    section = exact(ratio, "bilinear").sections(80)[0]
    b, a = ([round(float(value.mid()) * 16384) for value in group] for group in (section.b, section.a))
    gain = f"{sum(b) / sum(a):.3f}" if sum(a) else "infinite"
    return f"b {b}, a {a}: DC gain {gain}" + (" (silent)" if not any(b) else "")


def main() -> None:
    method = sys.argv[1] if len(sys.argv) > 1 else "bilinear"
    for name, arithmetic in CHOICES.items():
        print(f"\ndirect, {name}, 16-bit data, {method}")
        print(f"{'rate/corner':>12} {'DC gain':>14} {'impulse':>12} {'rest bound':>12} {'left':>8} {'settled':>10}")
        for ratio in RATIOS:
            print(f"{ratio:>12} {row(exact(ratio, method), arithmetic, ratio)}", flush=True)
    print("\nnaive direct form, 14 fraction bits")
    for ratio in RATIOS:
        print(f"{ratio:>12} {naive(ratio)}")


if __name__ == "__main__":
    main()
