"""The interpreter against the difference equation written out in rationals, and against the exact filter."""

from fractions import Fraction
from math import floor

import numpy as np
import pytest

from afterkick.errors import Refused
from afterkick.fixed import Program, quantised_dc_gain, simulate, trace
from afterkick.fixed.program import Overflow, Rounding
from fixed.random_designs import PlainSampled, program_of, random_codes, random_program
from helpers import pulse


def rounded(value: Fraction, rounding: Rounding) -> int:
    if rounding is Rounding.EVEN:
        return round(value)
    return floor(value + Fraction(1, 2)) if rounding is Rounding.NEAREST else floor(value)


def stored(value: int, bits: int, overflow: Overflow) -> int:
    low, high = -(2 ** (bits - 1)), 2 ** (bits - 1) - 1
    if overflow is Overflow.SATURATE:
        return max(low, min(high, value))
    return (value - low) % 2**bits + low


def difference_equations(program: Program, codes: list[int]) -> list[int]:
    """Direct form I section after section from b, a and their binary points only; knows nothing of words and steps."""
    signal = [0] * program.delay_samples + list(codes)
    signal = signal[: len(codes)]
    for section in program.sections:
        feedback = any(section.a[1:])
        own = Fraction(2) ** section.b_fraction_bits
        scale = 2**section.a_fraction_bits if feedback else own
        answer: list[int] = []
        for n in range(len(signal)):
            past = [answer[n - k] if n >= k else 0 for k in (1, 2)]
            numerator = Fraction(sum(b * signal[n - k] for k, b in enumerate(section.b) if n >= k)) / own * scale
            if feedback and own > scale:
                numerator = Fraction(rounded(numerator, program.rounding))
            total = numerator - section.a[1] * past[0] - section.a[2] * past[1]
            answer.append(stored(rounded(total / scale, program.rounding), program.data_bits, program.overflow))
        signal = answer
    return signal


@pytest.mark.parametrize("seed", range(60))
def test_program_is_its_difference_equations(seed):
    program = random_program(seed)
    codes = random_codes(program, seed, 40)
    assert simulate(program, codes).tolist() == difference_equations(program, codes), f"seed {seed}"


@pytest.mark.parametrize("seed", range(8))
def test_many_stimuli_equal_one_by_one(seed):
    program = random_program(seed)
    columns = np.array([random_codes(program, 100 + k, 30) for k in range(20)]).T
    together = trace(program, columns)
    alone = [trace(program, column) for column in columns.T]
    assert together.outputs.shape == columns.shape
    assert all((together.outputs[:, k] == run.outputs).all() for k, run in enumerate(alone))
    assert all((together.state[name] == [run.state[name] for run in alone]).all() for name in together.state)
    assert together.overflows == {name: sum(r.overflows[name] for r in alone) for name in together.overflows}


def test_final_state_continues_the_run():
    program = random_program(3)
    codes = random_codes(program, 3)
    whole = trace(program, codes)
    first = trace(program, codes[:100])
    second = trace(program, codes[100:], {name: int(value) for name, value in first.state.items()})
    assert [*first.outputs, *second.outputs] == whole.outputs.tolist()
    assert second.state == whole.state


def test_overflows_are_counted_where_they_happen():
    program = program_of(([0.75], []), ([1.9], []), scaling="none", data_bits=8, coefficient_bits=8)
    run = trace(program, [127, -128, 10, 0])
    # 0.75 * 127 rounds to 95, which 1.9 takes beyond 127; -128 likewise; 10 stays inside
    assert run.outputs.tolist() == [127, -128, 15, 0]
    assert run.overflows == {"y": 2}


@pytest.mark.parametrize(
    "inputs",
    [[0.5], [200], [-129], [[[0]]], ["a"]],
    ids=["a fraction", "too high", "too low", "three dimensions", "text"],
)
def test_wrong_inputs_are_refused(inputs):
    with pytest.raises(Refused):
        simulate(program_of(([1], [-0.5]), data_bits=8), inputs)


def test_unknown_state_is_refused():
    with pytest.raises(Refused, match="nonsense"):
        trace(program_of(([1], [-0.5])), [0], {"nonsense": 1})


def test_no_samples():
    program = program_of(([1], [-0.5]))
    assert simulate(program, []).shape == (0,)
    assert simulate(program, np.zeros((0, 20), dtype=int)).shape == (0, 20)


def test_pulse_response_is_that_of_the_exact_filter():
    """With 32-bit words only rounding separates the two.

    Each output rounds by at most half a count (and the sum before it by far less), each coefficient by 2^-31 of its
    group.  The noise passes through sections whose responses have absolute sums below 8, four of them in a row at most;
    the coefficients move a response of absolute sum below 8 by less than 2^-31 * 8 * 8 * 6 of full scale.
    """
    sections = (([0.05, 0.1, 0.05], [-1.1, 0.4]), ([0.3, 0.2, 0.1], [-0.9, 0.5]), ([0.5, 0.4], [-0.3]))
    program = program_of(*sections, data_bits=32, coefficient_bits=32, scaling="none")
    full = 2**31 - 1
    found = simulate(program, [full] + [0] * 60).tolist()
    exact = [float(value) * full for value in pulse(PlainSampled(sections).sections(128), 61)]
    worst = max(abs(y - x) for y, x in zip(found, exact, strict=True))
    assert worst <= 8 + 8 * 8 + 8 * 8 * 6
    assert worst > 0


def test_step_settles_at_the_exact_dc_gain():
    program = program_of(([0.05, 0.1, 0.05], [-1.1, 0.4]), ([0.3, 0.2], [-0.3]), data_bits=24, coefficient_bits=16)
    gain = quantised_dc_gain(program)
    settled = simulate(program, [2**22] * 400)[-1]
    # the last rounding of each section, times the gain of what follows and of its own feedback
    assert abs(settled - float(int(gain.numerator) / int(gain.denominator)) * 2**22) <= 8


def test_delay_is_whole_samples():
    sections = (([0.25, 0.5], [-0.25]),)
    codes = random_codes(program_of(*sections), 5, 100)
    plain = simulate(program_of(*sections), codes)
    for delay in (1, 2, 256):
        delayed = simulate(program_of(*sections, delay=delay), codes)
        assert not delayed[:delay].any()
        assert (delayed[delay:] == plain[:-delay]).all()


def test_many_stimuli_side_by_side():
    """A thousand samples of a thousand equal stimuli, four sections of order 2, are the single one a thousand times."""
    program = program_of(*[([0.1, 0.2, 0.1], [-1.2, 0.5])] * 4)
    one = simulate(program, np.full(1000, 1000))
    assert (simulate(program, np.full((1000, 1000), 1000)) == one[:, None]).all()
