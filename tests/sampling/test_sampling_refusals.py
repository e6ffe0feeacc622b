"""What sampling refuses or warns of, by name."""

import pytest
from flint import fmpq

from afterkick.design import schema
from afterkick.errors import Problem, Refused
from afterkick.model.model import Model
from afterkick.sampling.sample import aliased_hz
from helpers import blocks, exact, model_from, overlap, pulse, ratio, sampled

METHODS = ("zero-order-hold", "first-order-hold", "impulse-invariant", "bilinear", "matched", "backward-difference")
IMPROPER = ratio(["1", "2", "3"], ["1", "4"])


def refusal(model: Model, rate_hz: str, method: str, **options: str) -> Problem:
    """The one problem that sampling reports."""
    with pytest.raises(Refused) as caught:
        sampled(model, rate_hz, method, **options)
    (problem,) = caught.value.problems
    assert problem.remedy
    return problem


def delayed(delay_s: str, *parts: schema.Block) -> Model:
    return blocks(*(parts or (schema.Lag(corner_hz=fmpq(2)),)), schema.DeadTime(delay_s=exact(delay_s)))


@pytest.mark.parametrize("method", ["zero-order-hold", "first-order-hold", "impulse-invariant", "matched"])
def test_improper_model(method: str) -> None:
    problem = refusal(IMPROPER, "10", method)
    assert problem.where == "sampling.method"
    assert problem.found == f"{method} on an improper model (2 zeros, 1 poles)"
    assert "bilinear or backward-difference" in problem.accepted
    assert "derivative_corner_hz" in problem.remedy


@pytest.mark.parametrize("method", ["bilinear", "backward-difference"])
def test_methods_that_map_an_improper_model(method: str) -> None:
    """s = K (1 - 1/z)/(1 + 1/z) or (1 - 1/z)/T put in by hand: (s^2 + 2s + 3)/(s + 4) at T = 0.1."""
    sections = sampled(IMPROPER, 10, method).sections(100)
    v = fmpq(1)
    if method == "bilinear":
        # times (1 + v)^2, v = 1/z: (400 (1-v)^2 + 40 (1-v)(1+v) + 3 (1+v)^2) / ((20 (1-v) + 4 (1+v)) (1+v))
        top, bottom = [400 + 40 + 3, -800 + 6, 400 - 40 + 3], [24, 24 - 16, -16]
    else:
        # times T^2: ((1-v)^2 + 0.2 (1-v) + 0.03) / (0.1 (1-v) + 0.04)
        top, bottom = [123, -220, 100], [14, -10, 0]
    found = [float(x) for x in pulse(sections, 6)]
    expected: list[fmpq] = []
    for n in range(6):
        value = v * top[n] if n < 3 else fmpq(0)
        value -= sum((bottom[k] * expected[n - k] for k in (1, 2) if n >= k), fmpq(0))
        expected.append(value / bottom[0])
    assert found == pytest.approx([float(x.numerator) / float(x.denominator) for x in expected], rel=1e-14)


@pytest.mark.parametrize("method", ["bilinear", "matched", "backward-difference"])
def test_fraction_of_a_sample_of_dead_time(method: str) -> None:
    problem = refusal(delayed("0.0125"), "100", method)
    assert problem.where == "sampling.method"
    assert problem.found == f"a dead time of 1.25 samples with {method}"
    assert problem.accepted == "whole samples"
    assert "zero-order-hold" in problem.remedy
    assert "rate_hz = 80" in problem.remedy


def test_dead_time_off_the_grid_with_a_dirac_part() -> None:
    lead_lag = schema.LeadLag(zero_hz=fmpq(1), pole_hz=fmpq(3))
    problem = refusal(delayed("0.0125", lead_lag), "100", "impulse-invariant")
    assert "on a model with feedthrough" in problem.found
    assert "Dirac" in problem.accepted
    assert sampled(delayed("0.0125", lead_lag), "80", "impulse-invariant").delay_samples == 1


@pytest.mark.parametrize("method", METHODS)
def test_whole_samples_of_dead_time_become_delay(method: str) -> None:
    late = sampled(delayed("0.03"), 100, method)
    prompt = sampled(delayed("0"), 100, method)
    assert (late.delay_samples, prompt.delay_samples) == (3, 0)
    assert late.fraction_s == 0
    for x, y in zip(late.sections(80), prompt.sections(80), strict=True):
        assert overlap(x.b, y.b, 1e-20)
        assert overlap(x.a, y.a, 1e-20)


def test_dead_times_add_up_exactly() -> None:
    """0.1 s + 0.2 s are three samples at 10 Hz, which they are not in doubles."""
    model = blocks(
        schema.DeadTime(delay_s=exact("0.1")), schema.Lag(corner_hz=fmpq(1)), schema.DeadTime(delay_s=exact("0.2"))
    )
    filtered = sampled(model, 10, "bilinear")
    assert (filtered.delay_samples, filtered.fraction_s) == (3, 0)


@pytest.mark.parametrize(("denominator", "times"), [(["1", "-20"], 1), (["1", "-40", "400"], 2)])
def test_bilinear_pole_at_two_over_the_period(denominator: list[str], times: int) -> None:
    model = ratio(["1"], denominator)
    assert model.order == times
    problem = refusal(model, "10", "bilinear")
    assert problem.where == "sampling.rate_hz"
    assert problem.found == "bilinear with a pole at 20 rad/s, which is 2/T at 10 Hz"
    assert "rate_hz = 20" in problem.remedy
    assert sampled(model, 20, "bilinear").sections(60)


def test_backward_difference_pole_at_the_rate() -> None:
    problem = refusal(ratio(["1"], ["1", "-10"]), "10", "backward-difference")
    assert problem.found == "backward-difference with a pole at 10 rad/s, which is 1/T at 10 Hz"


@pytest.mark.parametrize(
    ("model", "kind"),
    [
        (ratio(["1", "0", "9"], ["1", "1", "9"], "Hz"), "zero"),
        (ratio(["1"], ["1", "0", "9"], "Hz"), "pole"),
    ],
    ids=["zero", "pole"],
)
def test_matched_where_the_gain_is_zero_or_unbounded(model: Model, kind: str) -> None:
    problem = refusal(model, "100", "matched", match_hz="3")
    assert problem.where == "sampling.match_hz"
    assert problem.found == f"3 Hz, where the model has a {kind} on the imaginary axis"
    assert sampled(model, 100, "matched", match_hz="2.9").sections(60)


def test_several_problems_are_reported_together() -> None:
    improper_and_late = blocks(
        schema.Ratio(numerator=(fmpq(1), fmpq(2), fmpq(3)), denominator=(fmpq(1), fmpq(4))),
        schema.DeadTime(delay_s=exact("0.05")),
    )
    with pytest.raises(Refused) as caught:
        sampled(improper_and_late, 10, "matched")
    assert len(caught.value.problems) == 2


def mode(frequency: str, unit: str = "Hz") -> Model:
    """An almost undamped pair."""
    form = schema.RootsForm(poles=((exact("-0.001"), exact(frequency)),), unit=unit)
    return model_from(form)


@pytest.mark.parametrize(
    ("frequency", "folded"),
    # f folds to |f - k rate|, k the nearest integer (sampling theorem, common practice)
    [("6", "4"), ("9", "1"), ("14", "4"), ("103.5", "3.5")],
)
@pytest.mark.parametrize("method", ["zero-order-hold", "first-order-hold", "impulse-invariant", "matched"])
def test_mode_above_half_the_rate(method: str, frequency: str, folded: str) -> None:
    (warning,) = sampled(mode(frequency), 10, method).warnings
    assert f"the mode at {frequency} Hz is at or above half the rate (5 Hz)" in warning
    assert f"it shows up at {folded} Hz" in warning


@pytest.mark.parametrize("method", ["bilinear", "backward-difference"])
def test_mode_above_half_the_rate_that_the_method_moves(method: str) -> None:
    (warning,) = sampled(mode("6"), 10, method).warnings
    assert f"{method} moves it below" in warning


def test_hundred_radians_a_second() -> None:
    """Common practice: 100 rad/s is 15.9155 Hz; at 20 Hz it shows up at 4.08451 Hz, at 32 Hz it is safe."""
    model = mode("100", "rad/s")
    (warning,) = sampled(model, 20, "zero-order-hold").warnings
    assert "15.9155 Hz" in warning
    assert "4.08451 Hz" in warning
    assert sampled(model, 32, "zero-order-hold").warnings == ()
    assert sampled(model, "31.8", "zero-order-hold").warnings != ()


def test_mode_exactly_at_half_the_rate() -> None:
    (root,) = mode("5").poles
    assert aliased_hz(root, fmpq(10)) == pytest.approx((5.0, 5.0))
    (root,) = mode("4.999999999999999999999999").poles
    assert aliased_hz(root, fmpq(10)) is None


@pytest.mark.parametrize("method", METHODS)
def test_fast_real_pole_and_slow_pair_are_no_matter(method: str) -> None:
    model = ratio(["1"], ["1", "300"])
    assert sampled(model, 10, method).warnings == ()
    assert sampled(mode("4.9"), 10, method).warnings == ()
