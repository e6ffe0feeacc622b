"""Estimates and bounds of single precision against simulation and against sums taken another way."""

from math import log

import numpy as np
import pytest
from flint import fmpq
from scipy.signal import sosfilt

from afterkick.design import schema
from afterkick.design.schema import Signal, Signals
from afterkick.floating import FloatProgram, float_estimates, float_program, float_trace, realised_float, simulate_float
from afterkick.floating.estimates import Cost
from afterkick.floating.simulate import float_states
from afterkick.sampling import Sampled
from afterkick.sampling.response_errors import response_errors
from floating.random_filters import as_sampled, random_filter
from floating.test_float_build import built
from helpers import blocks, pulse, sampled

SIGNALS = Signals(Signal("g", fmpq(16), fmpq(12)), Signal("g", fmpq(16)))
SMALLEST = 2.0**-126


def low_pass(times_corner: int, order: int = 2, method: str = "zero-order-hold") -> tuple[FloatProgram, Sampled]:
    model = blocks(schema.Lowpass(family="butterworth", order=order, corner_hz=fmpq(1)))
    filtered = sampled(model, times_corner, method)
    return float_program(filtered, SIGNALS, "probe"), filtered


@pytest.mark.parametrize("times_corner", [10, 100, 1000, 4000])
def test_dc_gain_of_a_low_pass_is_kept_where_its_poles_move(times_corner):
    program, filtered = low_pass(times_corner)
    found = float_estimates(program, filtered)
    assert found.dc_gain_relative == pytest.approx(float(found.dc_gain) - 1, abs=1e-15)
    assert abs(found.dc_gain_relative) <= 2**-24
    assert abs(response_errors(realised_float(program, filtered)).dc_gain_relative) <= 2**-24


def test_no_gain_to_compare_at_dc():
    model = blocks(schema.Highpass(family="butterworth", order=2, corner_hz=fmpq(1)))
    filtered = sampled(model, 100, "bilinear")
    assert float_estimates(float_program(filtered, SIGNALS, "probe"), filtered).dc_gain_relative is None


@pytest.mark.parametrize("seed", range(12))
def test_coefficient_error_is_a_bound_that_is_attained(seed):
    """|h_stored - h_exact| summed sample by sample in balls, and the sign pattern that attains it in doubles."""
    program, plain = random_filter(seed, closest=0.01)
    filtered = as_sampled(plain)
    length = 3000
    stored, wanted = (pulse(f.sections(200), length) for f in (realised_float(program, filtered), filtered))
    difference = np.array([float((a - b).mid()) for a, b in zip(stored, wanted, strict=True)])
    total = 12 * float(np.abs(difference).sum())
    bound = float_estimates(program, filtered).coefficient_error
    assert total * (1 - 1e-9) <= bound <= total * (1 + 1e-6) + 1e-12


@pytest.mark.parametrize("seed", range(12))
def test_output_peak_is_a_bound_that_is_attained(seed):
    """The sign pattern of the reversed pulse response, filtered by scipy in doubles."""
    program, plain = random_filter(seed, closest=0.01)
    sections = [[*section.b, *section.a] for section in program.sections]
    response = sosfilt(sections, [1.0] + [0.0] * 4999)
    reached = sosfilt(sections, 12 * np.sign(response[::-1]))[-1]
    bound = float_estimates(program, as_sampled(plain)).output_peak
    assert reached * (1 - 1e-9) <= bound <= reached * (1 + 1e-6)


def test_where_no_bound_exists():
    """An integrator."""
    model = blocks(schema.Integrator(gain=fmpq(2)), schema.Lag(corner_hz=fmpq(5)))
    filtered = sampled(model, 1000, "bilinear")
    found = float_estimates(float_program(filtered, SIGNALS, "probe"), filtered)
    assert found.coefficient_error is None
    assert found.output_peak is None
    assert found.noise is None
    assert found.dc_gain is None
    assert found.tail.after_impulse is None
    assert found.largest is None
    assert not found.overflows


@pytest.mark.parametrize(("times_corner", "order"), [(10, 2), (100, 2), (100, 4), (1000, 2)])
def test_noise_of_a_sine(times_corner, order):
    """The r.m.s. of single less double precision for the very sine of the estimate; the model is good to a factor."""
    program, filtered = low_pass(times_corner, order)
    noise = float_estimates(program, filtered).noise
    # an irrational number of samples a period: roundings don't repeat
    angle = 2 * np.pi * noise.at_hz / float(int(filtered.rate_hz)) * 1.000123
    samples = (12 * np.sin(angle * np.arange(60_000))).astype(np.float32)
    exact = float_trace(program, samples, precision=np.float64).outputs[20_000:]
    found = simulate_float(program, samples)[20_000:]
    rms = float(np.sqrt(np.mean((found - exact) ** 2)))
    assert 0.8 * noise.rms <= rms <= 1.25 * noise.rms
    assert float(np.sqrt(np.mean(exact**2))) == pytest.approx(noise.output_rms, rel=0.05)


@pytest.mark.parametrize("seed", range(20))
def test_tail_of_an_impulse(seed):
    program, plain = random_filter(seed, closest=0.02)
    if program.flush_below is not None:
        program = float_program(plain, SIGNALS, "probe")
    if not program.states:
        return
    tail = float_estimates(program, as_sampled(plain)).tail
    if tail.after_impulse is None:
        return
    states = np.abs(float_states(program, [12.0] + [0.0] * (2 * tail.after_impulse + 256)))
    counted = int(np.flatnonzero((states >= SMALLEST).any(axis=1))[-1]) + 1
    assert abs(tail.after_impulse - counted) <= 0.05 * counted + 10
    if tail.simulated is not None:
        assert tail.simulated == counted
        assert tail.sticks == bool(states[-1].any())


def test_tail_of_one_pole_in_closed_form():
    """12 p^n falls below 2^-126."""
    p = 0.9375
    program = built(([1], [-p]), signals=SIGNALS)
    found = float_estimates(program, as_sampled_one_pole(p)).tail
    wanted = (126 * log(2) + log(12)) / -log(p)
    assert abs(found.after_impulse - wanted) <= 2
    assert abs(found.simulated - wanted) <= 3
    assert found.sticks
    # a long step leaves 12 p / (1 - p)
    assert abs(found.after_step - (126 * log(2) + log(12 / (1 - p))) / -log(p)) <= 2


def as_sampled_one_pole(p: float) -> Sampled:
    from fixed.random_designs import PlainSampled

    return as_sampled(PlainSampled((([1], [-p]),)))


def test_tail_of_a_step():
    program, filtered = low_pass(100)
    tail = float_estimates(program, filtered).tail
    held = 3000
    states = np.abs(float_states(program, [12.0] * held + [0.0] * (2 * tail.after_step)))
    counted = int(np.flatnonzero((states >= SMALLEST).any(axis=1))[-1]) + 1 - held
    assert abs(tail.after_step - counted) <= 0.03 * counted


def test_tail_that_ends_by_itself():
    program = built(([0.3, 0.2, 0.1], []), signals=SIGNALS)
    from fixed.random_designs import PlainSampled

    tail = float_estimates(program, as_sampled(PlainSampled((([0.3, 0.2, 0.1], []),)))).tail
    assert tail.after_impulse is None


@pytest.mark.parametrize("seed", range(6))
def test_flush_error_is_a_bound(seed):
    """A coarse threshold, so that flushing is what matters; doubles without it are the reference."""
    _, plain = random_filter(seed, closest=0.02)
    program = float_program(plain, SIGNALS, "probe", flush_below=fmpq(1, 50))
    found = float_estimates(program, as_sampled(plain))
    samples = np.random.default_rng(seed).uniform(-0.2, 0.2, 1500).astype(np.float32)
    late = np.concatenate([np.zeros(program.delay_samples), samples])[: samples.size]
    exact = sosfilt([[*section.b, *section.a] for section in program.sections], late)
    difference = np.abs(simulate_float(program, samples) - exact).max()
    assert difference <= found.flush_error + 10 * found.noise.rms
    assert found.tail.simulated is None


def test_overflow_is_foreseen():
    signals = Signals(Signal("V", fmpq(10**38)), Signal("V", fmpq(10**38)))
    model = blocks(schema.Lag(corner_hz=fmpq(10)), schema.Gain(gain=fmpq(10)))
    filtered = sampled(model, 1000, "zero-order-hold")
    assert float_estimates(float_program(filtered, signals, "probe"), filtered).overflows


def test_cost_is_counted_from_the_steps():
    program, filtered = low_pass(100, method="bilinear")
    # b0 = b2 are one product: 4 products, 1 + 2 + 1 sums, 2 states
    assert float_estimates(program, filtered).cost == Cost(4, 4, 2, 2 * 4 + 4 + 2 * 2)
