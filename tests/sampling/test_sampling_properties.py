"""What must hold for every model, tried on random ones."""

from collections.abc import Callable, Sequence

import pytest
from flint import arb, ctx, fmpq, fmpq_poly
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from afterkick.model.factors import Factors, constant, from_polynomials, product
from afterkick.model.model import Model, build
from afterkick.model.partial_fractions import evaluate
from afterkick.model.roots import RADIANS
from afterkick.numbers import round_to_integer, working_bits
from afterkick.sampling import Sampled, Section
from helpers import overlap, pulse, run, sampled

METHODS = ("zero-order-hold", "first-order-hold", "impulse-invariant", "bilinear", "matched", "backward-difference")
HOLDS = METHODS[:3]
BITS = 400
"""Asked of the sections; the recursions lose some of it."""
WORKING_BITS = 1024
NUMBER = 25

few = settings(
    max_examples=20, deadline=None, database=None, print_blob=True, suppress_health_check=[HealthCheck.too_slow]
)

Part = tuple[list[fmpq], list[fmpq]]
"""Numerator and denominator of order 1 or 2, lowest power first."""

positive = st.integers(1, 40).map(lambda k: fmpq(k, 8))
signed = st.integers(-40, 40).filter(bool).map(lambda k: fmpq(k, 8))
rates = st.sampled_from([fmpq(5), fmpq(9), fmpq(100, 3), fmpq(1000)])


@st.composite
def parts(draw: st.DrawFn) -> Part:
    """Integrators, lags, damped and undamped pairs, with or without zeros."""
    kind = draw(st.sampled_from(["integrator", "lag", "damped", "undamped"]))
    if kind == "integrator":
        denominator = [fmpq(0), fmpq(1)]
    elif kind == "lag":
        denominator = [draw(positive), fmpq(1)]
    else:
        damping = fmpq(0) if kind == "undamped" else draw(positive)
        denominator = [draw(positive) ** 2, damping, fmpq(1)]
    numerator = [draw(signed) for _ in range(draw(st.integers(1, len(denominator))))]
    return numerator, denominator


part_lists = st.lists(parts(), min_size=1, max_size=3)


def factors_of(listed: Sequence[Part], time_scale: fmpq | int = 1) -> Factors:
    """The product; ``time_scale`` makes everything that many times faster, H(s / time_scale)."""

    def stretched(coefficients: list[fmpq]) -> fmpq_poly:
        return fmpq_poly([value / fmpq(time_scale) ** k for k, value in enumerate(coefficients)])

    return product(from_polynomials(stretched(top), stretched(bottom), RADIANS) for top, bottom in listed)


@st.composite
def models(draw: st.DrawFn) -> Model:
    """Models of order 1 to 6; what cancels exactly down to nothing is left out."""
    factors = factors_of(draw(part_lists))
    if set(factors.poles) <= set(factors.zeros):
        factors = product([factors, from_polynomials(fmpq_poly([1]), fmpq_poly([7, 1]), RADIANS)])
    return build(factors)


@given(model=models(), rate=rates, levels=st.lists(signed, min_size=1, max_size=4))
@few
def test_zero_order_hold_is_exact_for_staircases(model: Model, rate: fmpq, levels: list[fmpq]) -> None:
    """y(nT) = sum of the steps of the input times the analytic step response; a step is the shortest staircase."""
    sections = sampled(model, rate, "zero-order-hold").sections(BITS)
    inputs = [levels[min(n // 5, len(levels) - 1)] for n in range(NUMBER)]
    with working_bits(WORKING_BITS):
        step = [evaluate(model.response_modes(1), n / rate) for n in range(NUMBER)]
        rises = [inputs[0]] + [inputs[n] - inputs[n - 1] for n in range(1, NUMBER)]
        expected = [sum((arb(rises[k]) * step[n - k] for k in range(n + 1)), arb(0)) for n in range(NUMBER)]
    assert overlap(run(sections, inputs), expected)


@given(model=models(), rate=rates, slopes=st.lists(signed, min_size=1, max_size=4))
@few
def test_first_order_hold_is_exact_for_ramps(model: Model, rate: fmpq, slopes: list[fmpq]) -> None:
    """The same for inputs of straight pieces and the analytic ramp response; a ramp is the simplest."""
    sections = sampled(model, rate, "first-order-hold").sections(BITS)
    slope = [slopes[min(n // 5, len(slopes) - 1)] for n in range(NUMBER)]
    inputs = [fmpq(0)]
    for n in range(1, NUMBER):
        inputs.append(inputs[-1] + slope[n - 1] / rate)
    with working_bits(WORKING_BITS):
        ramp = [evaluate(model.response_modes(2), n / rate) for n in range(NUMBER)]
        bends = [slope[0]] + [slope[n] - slope[n - 1] for n in range(1, NUMBER)]
        expected = [sum((arb(bends[k]) * ramp[n - k] for k in range(n + 1)), arb(0)) for n in range(NUMBER)]
    assert overlap(run(sections, inputs), expected)


@given(model=models(), rate=rates, rule=st.sampled_from(["half", "full"]))
@few
def test_impulse_invariance_samples_the_impulse_response(model: Model, rate: fmpq, rule: str) -> None:
    """g[n] = T h(nT); at n = 0 half or the whole of T h(0+), plus the Dirac weight."""
    sections = sampled(model, rate, "impulse-invariant", first_sample=rule).sections(BITS)
    with working_bits(WORKING_BITS):
        expected = [evaluate(model.response_modes(), n / rate) / arb(rate) for n in range(NUMBER)]
        expected[0] = expected[0] / (2 if rule == "half" else 1) + model.feedthrough()
    assert overlap(pulse(sections, NUMBER), expected)


@given(model=models(), time=positive)
@few
def test_impulse_response_is_the_derivative_of_the_step_response(model: Model, time: fmpq) -> None:
    """Central difference over 2^-200 in balls of 1500 bits: its error is of the order of 2^-400."""
    with working_bits(1500):
        small = fmpq(1, 2**200)
        for integrations in (1, 2):
            whole, slope = model.response_modes(integrations), model.response_modes(integrations - 1)
            rise = (evaluate(whole, time + small) - evaluate(whole, time - small)) / arb(2 * small)
            expected = evaluate(slope, time)
            assert abs(rise - expected) < arb(2) ** -350 * (1 + abs(expected)) * 10**9
            assert (rise - expected).rad() < arb(2) ** -900


@given(model=models(), rate=rates, method=st.sampled_from(METHODS), bits=st.integers(20, 500))
@few
def test_promised_accuracy(model: Model, rate: fmpq, method: str, bits: int) -> None:
    """Radii of at most 2^-bits of the largest of the group; 1 + a1 + a2 exact or as good relative to itself."""
    for section in sampled(model, rate, method).sections(bits):
        with working_bits(4 * bits + 200):
            limit = arb(2) ** -bits
            for group in (section.b, section.a):
                largest = max(abs(value.mid()) for value in group)
                assert all(value.rad() <= limit * largest for value in group)
            at_one = section.a_at_one
            assert at_one.is_zero() or at_one.rad() <= 2 * limit * abs(at_one.mid())
            assert at_one.overlaps(sum(section.a, arb(0)))
            assert section.b_at_one.overlaps(sum(section.b, arb(0)))
        assert section.a[0] == 1
        assert section.a[0].is_exact()
        if section.order == 1:
            assert section.b[2].is_zero()
            assert section.a[2].is_zero()


def integers_of(build_it: Callable[[], Sampled], bits: int, precision: int) -> list[list[int]]:
    """The coefficients of each section as integers of ``bits`` bits, computed at a starting ``precision``."""
    filtered = build_it()

    def scaled(index: int, group: str, k: int, shift: int) -> Callable[[], arb]:
        return lambda: getattr(filtered.sections(ctx.prec)[index], group)[k] * arb(2) ** shift

    with working_bits(precision):
        found = []
        for index, section in enumerate(filtered.sections(precision)):
            for group in ("b", "a"):
                largest = max(float(abs(value).mid()) for value in getattr(section, group))
                shift = bits - 1
                while largest * 2**shift >= 2 ** (bits - 1):
                    shift -= 1
                while largest * 2**shift < 2 ** (bits - 2):
                    shift += 1
                found.append([shift] + [round_to_integer(scaled(index, group, k, shift), group) for k in range(3)])
    return found


@given(listed=part_lists, rate=rates, method=st.sampled_from(METHODS), bits=st.integers(16, 32))
@few
def test_integers_do_not_depend_on_the_working_precision(
    listed: list[Part], rate: fmpq, method: str, bits: int
) -> None:
    factors = product([factors_of(listed), from_polynomials(fmpq_poly([1]), fmpq_poly([7, 1]), RADIANS)])

    def build_it() -> Sampled:
        return sampled(build(factors), rate, method)

    assert integers_of(build_it, bits, 128) == integers_of(build_it, bits, 1024)


@given(
    listed=part_lists,
    rate=rates,
    method=st.sampled_from(METHODS),
    bits=st.integers(16, 32),
    power=st.sampled_from([-20, -3, 1, 7, 30]),
)
@few
def test_integers_do_not_depend_on_the_unit_of_time(
    listed: list[Part], rate: fmpq, method: str, bits: int, power: int
) -> None:
    """H(s / 2^k) at 2^k times the rate is the same filter."""
    factor = fmpq(2) ** power
    lag: Part = ([fmpq(1)], [fmpq(7), fmpq(1)])
    slow = integers_of(lambda: sampled(build(factors_of([*listed, lag])), rate, method), bits, 128)
    fast = integers_of(lambda: sampled(build(factors_of([*listed, lag], factor)), rate * factor, method), bits, 128)
    assert slow == fast


def equal_sections(found: Sequence[Section], expected: Sequence[Section]) -> bool:
    return len(found) == len(expected) and all(
        overlap(x.b, y.b) and overlap(x.a, y.a) for x, y in zip(found, expected, strict=True)
    )


@pytest.mark.parametrize("gain", [fmpq(1, 10**20), fmpq(10**20), fmpq(-1, 3)])
@given(model_factors=part_lists.map(factors_of), rate=rates, method=st.sampled_from(METHODS))
@few
def test_gain_changes_nothing_but_the_gain(gain: fmpq, model_factors: Factors, rate: fmpq, method: str) -> None:
    """The first section carries it; every other coefficient stays."""
    lag = from_polynomials(fmpq_poly([1]), fmpq_poly([7, 1]), RADIANS)
    plain = sampled(build(product([model_factors, lag])), rate, method).sections(200)
    scaled = sampled(build(product([model_factors, lag, constant(gain)])), rate, method).sections(200)
    with working_bits(400):
        undone = [Section(tuple(value / arb(gain) for value in scaled[0].b), scaled[0].a), *scaled[1:]]
        assert equal_sections(undone, plain)
