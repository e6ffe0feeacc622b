"""The impulse requirement on diagnostic electrocardiographs (ANSI/AAMI EC11 clause 3.2.7, IEC 60601-2-25:2011 clause
201.12.4.107): after 3 mV for 100 ms the output stays within 0.1 mV and slopes by at most 0.30 mV/s."""

from itertools import pairwise
from math import exp

import pytest

from afterkick.design import schema
from helpers import blocks, exact, reference, run, sampled

DATA = reference("ecg_pulse")
PULSE = DATA["test_pulse"]
LIMITS = {key: float(value) for key, value in DATA["limits"].items()}
RATE_HZ = 500
LENGTH = int(PULSE["duration_s"] * RATE_HZ)
METHODS = ("zero-order-hold", "first-order-hold", "bilinear", "matched", "impulse-invariant", "backward-difference")


def answer(corner_hz: object, order: int, method: str) -> tuple[list[float], list[float]]:
    """The samples during and after the pulse, in mV."""
    model = blocks(schema.Highpass(family="butterworth", order=order, corner_hz=exact(corner_hz)))  # type: ignore[arg-type]
    sections = sampled(model, RATE_HZ, method).sections(200)
    amplitude = exact(PULSE["amplitude_mv"])
    after = RATE_HZ * (1 if order == 1 else 10)
    output = [float(x) for x in run(sections, [amplitude] * LENGTH + [0] * after)]
    return output[:LENGTH], output[LENGTH:]


def worst(after: list[float]) -> tuple[float, float]:
    """Largest displacement, mV, and slope between samples, mV/s."""
    return max(map(abs, after)), max(abs(y - x) * RATE_HZ for x, y in pairwise(after))


def test_held_input_gives_the_analytic_undershoot() -> None:
    """3 (1 - e^(-0.1/tau)) mV and its slope, at the samples exactly: the pulse is a staircase."""
    expected = DATA["reference_highpass"]
    during, after = answer(expected["corner_frequency_hz"], 1, "zero-order-hold")
    assert -after[0] == pytest.approx(float(expected["undershoot_mv"]), rel=1e-14)
    # The last sample of the pulse is one period before its end.
    decay = exp(-1 / (RATE_HZ * float(expected["time_constant_s"])))
    assert during[-1] * decay == pytest.approx(float(expected["output_at_pulse_end_mv"]), rel=1e-14)
    displacement, slope = worst(after)
    assert displacement <= LIMITS["displacement_after_pulse_mv"]
    # between two samples the slope decays by half a period at most
    assert slope == pytest.approx(float(expected["initial_slope_mv_per_s"]), rel=4e-4)
    assert 1000 * slope == pytest.approx(float(expected["published_initial_slope_microvolt_per_s"]), abs=0.2)


@pytest.mark.parametrize("method", METHODS)
def test_every_method_meets_the_limits(method: str) -> None:
    """EC11 3.2.7 with the 0.05 Hz high-pass at 500 Hz; the undershoot is the analytic one but for half a sample."""
    expected = DATA["reference_highpass"]
    displacement, slope = worst(answer(expected["corner_frequency_hz"], 1, method)[1])
    assert displacement <= LIMITS["displacement_after_pulse_mv"]
    assert slope <= LIMITS["slope_after_pulse_mv_per_s"]
    assert displacement == pytest.approx(float(expected["undershoot_mv"]), rel=0.012)
    assert slope == pytest.approx(float(expected["initial_slope_mv_per_s"]), rel=0.012)


def test_highest_corner_that_meets_the_limits() -> None:
    """0.05396 Hz leaves 0.1 mV; a little more fails."""
    corner = DATA["reference_highpass"]["max_first_order_corner_meeting_displacement_hz"]
    displacement, _ = worst(answer(corner, 1, "zero-order-hold")[1])
    assert displacement == pytest.approx(LIMITS["displacement_after_pulse_mv"], rel=1e-12)
    assert worst(answer("0.054", 1, "zero-order-hold")[1])[0] > LIMITS["displacement_after_pulse_mv"]


def test_second_order_high_pass_fails() -> None:
    """A second-order Butterworth at 0.05 Hz undershoots to 0.132 mV (recomputed)."""
    expected = DATA["failing_case_second_order_butterworth"]
    displacement, _ = worst(answer(expected["corner_frequency_hz"], 2, "zero-order-hold")[1])
    assert round(displacement, 4) == float(expected["undershoot_mv"])
    assert displacement > LIMITS["displacement_after_pulse_mv"]


def test_monitoring_corner_fails() -> None:
    """0.67 Hz slopes by 4.34 mV/s (recomputed)."""
    expected = DATA["failing_case_monitor_corner"]
    _, slope = worst(answer(expected["corner_frequency_hz"], 1, "zero-order-hold")[1])
    assert slope == pytest.approx(float(expected["slope_mv_per_s"]), rel=6e-3)
    assert slope > LIMITS["slope_after_pulse_mv_per_s"]
