"""Facts of each method that hold exactly."""

from collections.abc import Sequence

import pytest
from flint import acb, arb, fmpq

from afterkick.design import schema
from afterkick.model.model import Model
from afterkick.model.roots import values
from afterkick.numbers import working_bits
from afterkick.sampling import Sampled, Section
from helpers import BITS, blocks, exact, multiplied, overlap, pulse, ratio, sampled

MODELS = {
    "lag": ratio(["3"], ["1", "2"]),
    "pair with a zero": ratio(["1", "3"], ["1", "0.8", "4"]),
    "non-minimum phase": ratio(["-1", "3"], ["1", "3", "2"]),
    "feedthrough": ratio(["1", "0.1", "4"], ["1", "2", "5"]),
    "double pole": ratio(["2"], ["1", "6", "9"]),
    "butterworth 5": blocks(schema.Lowpass(family="butterworth", order=5, corner_hz=exact("0.7"))),
    "elliptic band-pass": blocks(
        schema.Bandpass(
            family="elliptic",
            order=3,
            low_hz=exact("0.5"),
            high_hz=fmpq(1),
            ripple_db=exact("0.5"),
            stop_db=fmpq(40),
        )
    ),
}
RATE = fmpq(20)
EXACT_AT_ZERO = ("zero-order-hold", "first-order-hold", "bilinear", "matched", "backward-difference")


def at(sections: Sequence[Section], inverse_z: acb) -> acb:
    total = acb(1)
    for section in sections:
        top, bottom = (p[0] + inverse_z * (p[1] + inverse_z * p[2]) for p in (section.b, section.a))
        total *= top / bottom
    return total


def on_circle(frequency_hz: fmpq, rate_hz: fmpq) -> acb:
    angle = 2 * arb.pi() * frequency_hz / rate_hz
    return acb(angle.cos(), -angle.sin())


def zeros_at(filtered: Sampled, z: int) -> int:
    """How many zeros the sampled filter has exactly at a real z."""
    return sum(root.real and root.value.is_exact() and root.value.real == z for root in filtered.transfer().zeros)


def denominator(model: Model, images: Sequence[acb]) -> list[arb]:
    """prod(1 - image/z) for all poles, conjugates included."""
    total = [acb(1)]
    for image in images:
        total = [
            (total[k] if k < len(total) else acb(0)) - (image * total[k - 1] if k else acb(0))
            for k in range(len(total) + 1)
        ]
    return [value.real for value in total]


@pytest.mark.parametrize("method", EXACT_AT_ZERO)
@pytest.mark.parametrize("name", MODELS)
def test_gain_at_zero_frequency_is_kept(name: str, method: str) -> None:
    """H(z = 1) = H(s = 0): holds are exact for constants, the maps send s = 0 to z = 1."""
    model = MODELS[name]
    sections = sampled(model, RATE, method).sections(200)
    with working_bits(BITS):
        found, expected = at(sections, acb(1)).real, model.dc_gain_ball()
        assert expected is not None
        assert found.overlaps(expected)
        assert found.rad() < arb("1e-40")
        if model.zeros_at_origin:
            assert expected.is_zero()


@pytest.mark.parametrize("method", ["zero-order-hold", "first-order-hold", "impulse-invariant", "matched"])
@pytest.mark.parametrize("name", MODELS)
def test_poles_are_exponentials(name: str, method: str) -> None:
    """z = e^(pT) for every pole p."""
    model = MODELS[name]
    sections = sampled(model, RATE, method).sections(200)
    with working_bits(BITS):
        images = [(value / RATE).exp() for value, times in values(model.poles) for _ in range(times)]
        expected = denominator(model, images)
    found = multiplied([section.a for section in sections])
    assert overlap(found[: len(expected)], expected, 1e-40)
    assert all(value.is_zero() for value in found[len(expected) :])


@pytest.mark.parametrize("name", MODELS)
def test_bilinear_poles(name: str) -> None:
    """z = (K + p)/(K - p), K = 2/T."""
    model = MODELS[name]
    sections = sampled(model, RATE, "bilinear").sections(200)
    with working_bits(BITS):
        k = 2 * RATE
        expected = denominator(model, [(k + p) / (k - p) for p, times in values(model.poles) for _ in range(times)])
    assert overlap(multiplied([s.a for s in sections])[: len(expected)], expected, 1e-40)


@pytest.mark.parametrize("name", MODELS)
def test_bilinear_frequency_axis(name: str) -> None:
    """H_d at f is H at (K / 2 pi) tan(pi f / rate): the axis is only bent."""
    model = MODELS[name]
    sections = sampled(model, RATE, "bilinear").sections(200)
    with working_bits(BITS):
        for frequency in (fmpq(1, 3), fmpq(3), fmpq(19, 2)):
            bent = 2 * RATE * (arb.pi() * frequency / RATE).tan()
            found, expected = at(sections, on_circle(frequency, RATE)), model.at(acb(0, bent))
            assert found.overlaps(expected)
            assert abs(found - expected) < arb("1e-40")


@pytest.mark.parametrize("name", MODELS)
def test_bilinear_is_exact_at_the_matched_frequency(name: str) -> None:
    """Magnitude and phase at ``match_hz``, and not a little beside it."""
    model, frequency = MODELS[name], exact("2.5")
    sections = sampled(model, RATE, "bilinear", match_hz=frequency).sections(200)
    with working_bits(BITS):
        s = acb(0, 2 * arb.pi() * frequency)
        assert at(sections, on_circle(frequency, RATE)).overlaps(model.at(s))
        assert not at(sections, on_circle(frequency * 2, RATE)).overlaps(model.at(2 * s))


@pytest.mark.parametrize("choice", ["half-rate", "delay"])
@pytest.mark.parametrize("name", MODELS)
def test_matched_magnitude_at_the_matched_frequency(name: str, choice: str) -> None:
    model, frequency = MODELS[name], exact("0.6")
    sections = sampled(model, RATE, "matched", match_hz=frequency, zeros_at_infinity=choice).sections(200)
    with working_bits(BITS):
        found = abs(at(sections, on_circle(frequency, RATE)))
        expected = abs(model.at(acb(0, 2 * arb.pi() * frequency)))
        assert found.overlaps(expected)
        assert found.rad() < arb("1e-40")


@pytest.mark.parametrize("name", MODELS)
def test_where_zeros_at_infinity_go(name: str) -> None:
    """Bilinear and matched put them at z = -1; backward difference at z = 0; matched with "delay" leaves them."""
    model = MODELS[name]
    excess = model.relative_degree
    assert zeros_at(sampled(model, RATE, "bilinear"), -1) == excess
    assert zeros_at(sampled(model, RATE, "matched"), -1) == excess
    late = sampled(model, RATE, "matched", zeros_at_infinity="delay")
    assert zeros_at(late, -1) == 0
    assert late.transfer().leading == excess
    first = pulse(late.sections(80), excess + 1)
    assert all(value.is_zero() for value in first[:excess])
    assert not first[excess].contains(0)


@pytest.mark.parametrize("method", EXACT_AT_ZERO)
def test_zeros_at_the_origin_stay_at_one(method: str) -> None:
    """A band-pass of prototype order 3 has three zeros at s = 0; the holds keep one or two exactly."""
    filtered = sampled(MODELS["elliptic band-pass"], RATE, method)
    assert MODELS["elliptic band-pass"].zeros_at_origin == 1
    assert zeros_at(filtered, 1) == 1
    butterworth = blocks(schema.Bandpass(family="butterworth", order=3, low_hz=fmpq(1), high_hz=fmpq(2)))
    expected = {"zero-order-hold": 1, "first-order-hold": 2}.get(method, 3)
    assert zeros_at(sampled(butterworth, RATE, method), 1) == expected


@pytest.mark.parametrize("name", [name for name in MODELS if MODELS[name].relative_degree > 0])
def test_held_input_acts_one_sample_later(name: str) -> None:
    """No feedthrough: g[0] is exactly 0 under a zero-order hold, and not under a first-order hold."""
    assert pulse(sampled(MODELS[name], RATE, "zero-order-hold").sections(80), 1)[0].is_zero()
    assert not pulse(sampled(MODELS[name], RATE, "first-order-hold").sections(80), 1)[0].contains(0)


@pytest.mark.parametrize("method", ["zero-order-hold", "first-order-hold", "impulse-invariant", "bilinear", "matched"])
def test_undamped_pair_stays_on_the_circle(method: str) -> None:
    """a2 is exactly 1; backward difference damps it."""
    undamped = ratio(["9"], ["1", "0", "9"])
    filtered = sampled(undamped, RATE, method)
    (section,) = filtered.sections(80)
    assert section.a[2].is_exact()
    assert section.a[2] == 1
    assert filtered.marginal
    assert not filtered.stable
    damped = sampled(undamped, RATE, "backward-difference")
    assert damped.stable
    assert not damped.marginal


@pytest.mark.parametrize("method", ["zero-order-hold", "first-order-hold", "impulse-invariant", "bilinear", "matched"])
@pytest.mark.parametrize("poles", ["one", "two"])
def test_integrators_stay_at_one(method: str, poles: str) -> None:
    """1 + a1 + a2 is the point zero where a pole is at z = 1."""
    model = ratio(["1", "2"], ["1", "3", "0"]) if poles == "one" else ratio(["1", "2"], ["1", "3", "0", "0"])
    filtered = sampled(model, RATE, method)
    assert filtered.marginal
    assert sum(pole.at_one() for pole in filtered.transfer().poles) == (1 if poles == "one" else 2)
    assert any(section.a_at_one.is_zero() for section in filtered.sections(80))


def test_stability() -> None:
    assert sampled(MODELS["butterworth 5"], RATE, "zero-order-hold").stable
    growing = ratio(["1"], ["1", "-3"])
    for method in ("zero-order-hold", "first-order-hold", "impulse-invariant", "bilinear", "matched"):
        assert not sampled(growing, RATE, method).stable
    # 1/(1 - 3/2) = -2, and 1/(1 - 3) = -1/2: the map takes a fast unstable pole inside
    assert not sampled(growing, 2, "backward-difference").stable
    assert sampled(growing, 1, "backward-difference").stable


@pytest.mark.parametrize("method", ["zero-order-hold", "first-order-hold", "impulse-invariant", "bilinear", "matched"])
@pytest.mark.parametrize("name", ["lag", "pair with a zero", "feedthrough", "butterworth 5", "elliptic band-pass"])
def test_sum_form_is_the_same_filter(name: str, method: str) -> None:
    """The parallel sections and the direct part add up to the cascade at three points of the circle."""
    filtered = sampled(MODELS[name], RATE, method)
    form = filtered.parallel(200)
    assert form is not None
    direct, terms = form
    with working_bits(BITS):
        for frequency in (fmpq(0), fmpq(1, 2), fmpq(7)):
            v = on_circle(frequency, RATE)
            total = acb(direct)
            for term in terms:
                total += (term.b[0] + term.b[1] * v) / (term.a[0] + v * (term.a[1] + v * term.a[2]))
            expected = at(filtered.sections(200), v)
            assert total.overlaps(expected)
            assert abs(total - expected) < arb("1e-40")


@pytest.mark.parametrize("method", ["zero-order-hold", "matched"])
def test_no_sum_form_for_repeated_poles(method: str) -> None:
    assert sampled(MODELS["double pole"], RATE, method).parallel(60) is None
