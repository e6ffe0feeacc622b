"""The simulator of single precision against a loop written out by hand and against scipy in double precision."""

import numpy as np
import pytest
from flint import fmpq
from scipy.signal import sosfilt

from afterkick.errors import Refused
from afterkick.floating import FloatProgram, float_estimates, float_trace, simulate_float
from afterkick.floating.simulate import float_states
from floating.random_filters import as_sampled, random_filter
from floating.test_float_build import built


def by_hand(program: FloatProgram, samples: np.ndarray) -> np.ndarray:
    """Transposed direct form II in singles, in the order that the header states."""
    signal = np.concatenate([np.zeros(program.delay_samples, np.float32), samples])[: samples.size]
    zero = np.float32(0)
    for section in program.sections:
        b0, b1, b2 = (np.float32(x) for x in section.b)
        _, a1, a2 = (np.float32(x) for x in section.a)
        s1 = s2 = zero
        answer = []
        for x in signal:
            y = b0 * x + s1
            s1 = (s2 - a1 * y) + b1 * x
            s2 = b2 * x - a2 * y
            if program.flush_below is not None and max(abs(s1), abs(s2)) < np.float32(program.flush_below):
                s1 = s2 = zero
            answer.append(y)
        signal = np.array(answer, np.float32)
    return signal


def stimulus(seed: int, length: int = 400) -> np.ndarray:
    generator = np.random.default_rng(seed)
    samples = generator.uniform(-12, 12, length)
    samples[length // 4 : length // 2] = 0
    samples[length // 2 : 3 * length // 4] = 12
    return samples.astype(np.float32)


@pytest.mark.parametrize("seed", range(40))
def test_against_a_loop_by_hand(seed):
    program, _ = random_filter(seed)
    samples = stimulus(seed)
    found = simulate_float(program, samples)
    assert found.dtype == np.float32
    # a term that is not there is a zero by hand: the same value, at most of the other sign
    assert (found == by_hand(program, samples)).all()


@pytest.mark.parametrize("seed", range(10))
def test_side_by_side_is_one_by_one(seed):
    program, _ = random_filter(seed)
    inputs = np.stack([stimulus(seed + k, 100) for k in range(5)], axis=1)
    together = simulate_float(program, inputs)
    alone = np.stack([simulate_float(program, column) for column in inputs.T], axis=1)
    assert (together.view(np.uint32) == alone.view(np.uint32)).all()
    assert simulate_float(program, inputs[:, :1]).shape == (100, 1)


@pytest.mark.parametrize("seed", range(40))
def test_against_scipy_in_double_within_the_estimated_noise(seed):
    """scipy.signal.sosfilt with the same coefficients; a white input of the promised peak is easier than the worst
    sine, for which the estimate is made."""
    program, plain = random_filter(seed)
    samples = np.random.default_rng(seed).uniform(-12, 12, 2000).astype(np.float32)
    late = np.concatenate([np.zeros(program.delay_samples), samples])[: samples.size]
    exact = sosfilt([[*section.b, *section.a] for section in program.sections], late)
    found = simulate_float(program, samples)
    estimates = float_estimates(program, as_sampled(plain))
    rms = float(np.sqrt(np.mean((found - exact) ** 2)))
    assert rms <= 1.5 * estimates.noise.rms
    doubles = float_trace(program, samples, precision=np.float64).outputs
    assert np.allclose(doubles, exact, rtol=1e-9, atol=1e-9 * np.abs(exact).max())


def test_states_continue_a_run():
    program, _ = random_filter(3)
    samples = stimulus(3, 60)
    first = float_trace(program, samples[:25])
    second = float_trace(program, samples[25:], first.state)
    assert (np.concatenate([first.outputs, second.outputs]) == simulate_float(program, samples)).all()
    states = float_states(program, samples[:25])
    assert states[-1].tolist() == [float(first.state[name]) for name in program.states]


def test_flushed_states_end_at_zero():
    sections = ([0.5, 0.5], [-1.8, 0.81])
    kick = [1.0] + [0.0] * 3000
    plain, flushed = built(sections), built(sections, flush_below=fmpq(1, 10**30))
    assert float_states(plain, kick)[-1].any()
    states = float_states(flushed, kick)
    assert not states[-1].any()
    assert np.abs(states).max(axis=1)[states.any(axis=1)].min() >= flushed.flush_below
    assert (simulate_float(plain, kick)[:100] == simulate_float(flushed, kick)[:100]).all()


@pytest.mark.parametrize(
    "inputs",
    [[np.nan], [np.inf], [1e39], ["a"], [[[1.0]]], [1j], 3.0],
    ids=["nan", "inf", "huge", "text", "3d", "j", "0d"],
)
def test_bad_inputs_are_refused(inputs):
    with pytest.raises(Refused, match="inputs"):
        simulate_float(built(([1], [])), inputs)


def test_unknown_state_is_refused():
    with pytest.raises(Refused, match="unknown"):
        float_trace(built(([1], [-0.5])), [1.0], {"s9_1": 1.0})
