"""Where steps settle: the bound against every state there is, against a published rule, and against the simulator.

Sources: L. B. Jackson, "An analysis of limit cycles due to multiplication rounding in recursive digital (sub)filters",
Allerton 1969: a first-order section rests within k = Int[0.5 / (1 - |b|)] last places of 0 (rule seen in print); with a
constant input the same algebra, y = Q[b y + (1 - b) x], puts it within k of x.  The DC gain of an impulse-invariant lag
is a geometric series whose first sample, at the jump, counts half.
"""

from math import exp, floor, pi

import numpy as np
import pytest
from flint import fmpq

from afterkick.design.schema import Integrator, Lag, Lowpass
from afterkick.fixed import Program, simulate, trace
from afterkick.fixed.narrow import fit, shift_right
from afterkick.fixed.program import Move
from afterkick.fixed.repetition import until_repeated
from afterkick.fixed.settled import StepOffset, settled_offsets, step_codes
from afterkick.fixed.worst_case import WorstCase
from afterkick.report.settling import settled_data, settled_rows
from fixed.random_designs import PlainSampled, program_of, random_program
from fixed.structure_designs import HALF, build
from helpers import blocks, sampled

JACKSON = [(1, 2, 1), (3, 4, 2), (17, 20, 3), (9, 10, 5), (19, 20, 10)]
SLOW = blocks(Lowpass("butterworth", 2, fmpq(1)))


def plain(b: list[float], a: list[float], codes: list[int], **arithmetic: object) -> tuple[Program, list[StepOffset]]:
    """An 8-bit section from plain numbers, and its steps."""
    program = program_of((b, a), data_bits=8, **arithmetic)
    span = WorstCase(program).rounding_span
    return program, list(settled_offsets(program, PlainSampled(((b, a),)), span, codes))


@pytest.mark.parametrize(("top", "bottom", "k"), JACKSON)
def test_a_first_order_step_stops_at_jacksons_distance(top: int, bottom: int, k: int) -> None:
    # b is a hair above the fraction, so that what would be a tie still rounds as published
    b = top / bottom + 2.0**-20
    _, (up, half, down) = plain([1 - b], [-b], [100, 50, -100], coefficient_bits=24)
    for step in (up, half, down):
        assert floor(step.largest + 0.01) == k
        assert step.simulated.period == 1
    assert [round(step.simulated_lowest) for step in (up, half)] == [-k, -k]
    assert round(down.simulated_highest) in (k, k - 1)  # ties go up: from below the rule's value, from above one less


def test_every_step_of_small_sections_stays_within_its_bound() -> None:
    reached = 0.0
    for a in ([-0.9], [0.95], [-1.6, 0.68], [-1.2, 0.95], [0.3, 0.9], [-1.9, 0.9125], [-0.9, 0.2]):
        for rounding in ("nearest", "floor", "even"):
            gain = sum([1, *a]) / 2
            _, steps = plain([gain], a, list(range(-127, 128)), coefficient_bits=16, rounding=rounding)
            for step in steps:
                assert step.lowest <= step.simulated_lowest <= step.simulated_highest <= step.highest
                if step.largest:
                    reached = max(reached, step.simulated_highest / step.largest, -step.simulated_lowest / step.largest)
    assert reached == 1, "a bound that nothing reaches is too wide"


def from_every_state(program: Program, code: int, samples: int, last: int) -> tuple[int, int]:
    """The extremes of the output in the last samples with a constant input, over all pairs of 8-bit states."""
    grid = np.meshgrid(*2 * [np.arange(-128, 128, dtype=np.int64)])
    words = {"x": np.int64(code), "y_1": grid[0].ravel(), "y_2": grid[1].ravel()}
    lowest, highest = 127, -128
    for n in range(samples):
        for step in program.steps:
            if isinstance(step, Move):
                words[step.dest] = words[step.source]
                continue
            total = sum(term.factor * words[term.word] for term in step.terms)
            rounded = shift_right(total, step.right_shift, step.rounding)
            words[step.dest] = fit(rounded, program.word(step.dest).bits, step.overflow)
        if n >= samples - last:
            lowest, highest = min(lowest, int(words["y"].min())), max(highest, int(words["y"].max()))
    return lowest, highest


@pytest.mark.parametrize("rounding", ["nearest", "floor", "even"])
@pytest.mark.parametrize("a", [[-1.6, 0.68], [0.3, 0.9], [-0.9, 0.2]], ids=str)
def test_no_state_of_a_small_section_settles_beyond_the_bound(a: list[float], rounding: str) -> None:
    program, (step,) = plain([sum([1, *a]) / 2], a, [60], coefficient_bits=16, rounding=rounding)
    lowest, highest = from_every_state(program, 60, 300, 60)
    hair = 1e-9  # of the floats; the offsets themselves are a whole count apart
    assert step.lowest - hair <= lowest - step.wanted <= step.simulated_lowest + hair
    assert step.simulated_highest - hair <= highest - step.wanted <= step.highest + hair


def test_floor_settles_below_and_never_above() -> None:
    _, (step,) = plain([0.05], [-0.95], [100], coefficient_bits=24, rounding="floor")
    assert -21 <= step.lowest <= step.simulated_lowest == step.simulated_highest <= -18
    assert step.highest <= 0


@pytest.mark.parametrize("method", ["bilinear", "zero-order-hold"])
def test_error_feedback_settles_at_the_gain_itself(method: str) -> None:
    """Mean of (1 - 1/z) e over a period is 0: a period of one sample is at the DC gain times the input exactly."""
    filtered = sampled(SLOW, 400, method)
    for carry, off in ((0, True), (1, False)):
        program = build("direct", filtered, HALF, coefficient_bits=32, carry=carry)
        worst = WorstCase(program)
        steps = settled_offsets(program, filtered, worst.rounding_span, step_codes(program, worst.peak_code))
        assert [step.code for step in steps] == [16384, 8192, 2048, 256, 1, -16384]
        assert all(step.simulated.period == 1 for step in steps)
        assert any(step.simulated_lowest or step.simulated_highest for step in steps) is off


@pytest.mark.parametrize("structure", ["direct", "transposed", "delta", "coupled", "parallel"])
@pytest.mark.parametrize("rounding", ["nearest", "floor", "even"])
def test_every_structure_settles_as_the_simulator_says(structure: str, rounding: str) -> None:
    filtered = sampled(blocks(Lowpass("butterworth", 3, fmpq(1))), 30, "zero-order-hold")
    program = build(structure, filtered, HALF, coefficient_bits=16, rounding=rounding)
    worst = WorstCase(program)
    for step in settled_offsets(program, filtered, worst.rounding_span, step_codes(program, worst.peak_code)):
        assert step.lowest <= step.simulated_lowest <= step.simulated_highest <= step.highest
        assert step.simulated.period is not None
        repeated(program, step.code)


def repeated(program: Program, code: int, most: int = 20_000) -> bool:
    """Compares one run with the simulator; whether it could be compared, as no word overflowed."""
    seen = until_repeated(program)(code, most)
    run = trace(program, [code] * (seen.samples + (seen.period or 0)))
    if any(run.overflows.values()):
        return False
    if seen.period is None:
        tail = run.outputs[-(seen.samples // 5) :]
    else:
        before, tail = run.outputs[-2 * seen.period : -seen.period], run.outputs[-seen.period :]
        assert before.tolist() == tail.tolist()
        start = trace(program, [code] * seen.samples).state
        again = trace(program, [code] * seen.period, {name: int(value) for name, value in start.items()}).state
        assert start == again
    assert (seen.lowest, seen.highest) == (tail.min(), tail.max())
    return True


def test_the_run_is_the_simulators_for_random_programs() -> None:
    compared = 0
    for seed in range(40):
        program = random_program(seed)
        highest = program.word(program.input).highest
        compared += sum(repeated(program, code, 3000) for code in (highest // 3, 1, -highest // 7))
    assert compared > 60


@pytest.mark.parametrize("rounding", ["nearest", "floor", "even"])
def test_ties_are_rounded_as_the_simulator_rounds_them(rounding: str) -> None:
    for a in ([-0.5], [0.5], [-0.75], [-1.0, 0.5]):
        program = program_of(([0.25], a), data_bits=8, coefficient_bits=16, rounding=rounding)
        assert all(repeated(program, code) for code in range(-100, 100))


def test_a_step_that_does_not_repeat_says_so() -> None:
    filtered = sampled(SLOW, 400, "bilinear")
    program = build("direct", filtered, HALF, coefficient_bits=32, carry=1)
    span = WorstCase(program).rounding_span
    (short,) = settled_offsets(program, filtered, span, [16384], work=700)
    assert short.simulated.period is None
    assert short.simulated.samples <= 100
    assert short.simulated_lowest < -8000, "it is still on its way"
    assert "1 of them not yet periodic after" in settled_rows([short])[1][1]
    assert settled_data([short])[0]["period"] is None
    (long,) = settled_offsets(program, filtered, span, [16384])
    assert "not yet" not in settled_rows([long])[1][1]


def test_the_coefficients_part_is_the_gain_beyond_the_exact_one() -> None:
    filtered = sampled(blocks(Lag(corner_hz=fmpq(1))), 50, "impulse-invariant")
    program = build("direct", filtered, HALF, coefficient_bits=12)
    (step,) = settled_offsets(program, filtered, WorstCase(program).rounding_span, [10_000])
    turn = 2 * pi / 50
    exact = turn * (1 / (1 - exp(-turn)) - 1 / 2) * 10_000
    assert step.from_coefficients == pytest.approx(step.wanted - exact, abs=1e-8)
    assert abs(step.from_coefficients) > 0.01
    kept = sampled(SLOW, 400, "bilinear")
    program = build("direct", kept, HALF, coefficient_bits=32)
    (step,) = settled_offsets(program, kept, WorstCase(program).rounding_span, [10_000])
    assert (step.wanted, step.from_coefficients) == (10_000, 0)


def test_nothing_settles_with_an_integrator() -> None:
    filtered = sampled(blocks(Integrator()), 50, "bilinear")
    program = build("direct", filtered, HALF)
    assert settled_offsets(program, filtered, (-1.0, 1.0), [1]) == ()
    assert settled_rows(()) == []


def test_codes_are_within_the_input_word() -> None:
    program = program_of(([0.1], [-0.9]), data_bits=8)
    assert step_codes(program, 128) == (127, 63, 15, 1, -127)
    assert simulate(program, list(step_codes(program, 128))).shape == (5,)
