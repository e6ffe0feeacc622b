"""Models and rates that meet by accident: a zero mapped to infinity, a sample exactly zero, a mode at the rate."""

import pytest
from flint import arb, fmpq

from afterkick.design import schema
from afterkick.errors import Refused
from afterkick.model.model import Model
from afterkick.model.partial_fractions import evaluate
from afterkick.numbers import working_bits
from helpers import BITS, blocks, exact, model_from, overlap, pulse, ratio, sampled

METHODS = ("zero-order-hold", "first-order-hold", "impulse-invariant", "bilinear", "matched", "backward-difference")


def undamped(frequency_hz: str) -> Model:
    return model_from(schema.RootsForm(poles=((fmpq(0), exact(frequency_hz)),), unit="Hz"))


def test_all_pass_of_one_sample() -> None:
    """(2/T - s)/(2/T + s), the first Pade approximant of a delay of T, is one sample exactly under bilinear."""
    filtered = sampled(ratio(["-1", "2"], ["1", "2"]), 1, "bilinear")
    values = pulse(filtered.sections(100), 5)
    assert [value.mid() for value in values] == [0, 1, 0, 0, 0]


@pytest.mark.parametrize(("method", "zero"), [("bilinear", "2"), ("backward-difference", "1")])
def test_zero_that_is_mapped_to_infinity(method: str, zero: str) -> None:
    """(s - zero)/(s + 2)^2 at 1 Hz, by hand: bilinear -4v(1+v)/16, v = 1/z; backward difference -v/(3 - v)^2."""
    sections = sampled(ratio(["1", f"-{zero}"], ["1", "4", "4"]), 1, method).sections(100)
    found = [float(value) for value in pulse(sections, 5)]
    expected = {
        "bilinear": [0, -0.25, -0.25, 0, 0],
        "backward-difference": [0] + [-n / 3.0 ** (n + 1) for n in range(1, 5)],
    }
    assert found == pytest.approx(expected[method], rel=1e-15)


@pytest.mark.parametrize(
    ("numerator", "denominator", "rate", "method"),
    [
        # step response t^2/2 - t/2, zero at t = 1
        (["-0.5", "1"], ["1", "0", "0"], "1", "zero-order-hold"),
        # ramp response t^3/2 - t^2/2, zero at t = 1
        (["-1", "3"], ["1", "0", "0"], "1", "first-order-hold"),
        # impulse response t^2/2 - t/2
        (["-0.5", "1"], ["1", "0", "0", "0"], "1", "impulse-invariant"),
    ],
)
def test_first_sample_that_is_exactly_zero(
    numerator: list[str], denominator: list[str], rate: str, method: str
) -> None:
    """The leading coefficient vanishes by accident, and the filter is what the analytic response says all the same."""
    model = ratio(numerator, denominator)
    values = pulse(sampled(model, rate, method).sections(100), 8)
    with working_bits(BITS):
        integrations = {"zero-order-hold": 1, "first-order-hold": 2, "impulse-invariant": 0}[method]
        response = [evaluate(model.response_modes(integrations), fmpq(n)) for n in range(10)]
        if method == "zero-order-hold":
            expected = [response[0]] + [response[n] - response[n - 1] for n in range(1, 8)]
        elif method == "first-order-hold":
            expected = [response[1]] + [response[n + 1] - 2 * response[n] + response[n - 1] for n in range(1, 8)]
        else:
            expected = response[:8]
    assert overlap(values, expected)


@pytest.mark.parametrize(
    ("frequency", "method"), [("0.5", "impulse-invariant"), ("1", "zero-order-hold"), ("1", "impulse-invariant")]
)
def test_mode_that_the_samples_never_see(frequency: str, method: str) -> None:
    """sin(pi n) and a whole period of a held response are zero: there is no filter, and that is said."""
    with pytest.raises(Refused, match=r"rate"):
        sampled(undamped(frequency), 1, method).sections(60)


def test_ramped_mode_at_half_the_rate() -> None:
    """The hold table with wT = pi: w^2/(s^2 + w^2) becomes (1 + 2v + v^2)/(1 + 2v + v^2), which only passes on."""
    sections = sampled(undamped("0.5"), 1, "first-order-hold").sections(60)
    with working_bits(BITS):
        square = (2 * arb.pi() * arb("0.5")) ** 2
        assert overlap(pulse(sections, 4), [1 / square, arb(0), arb(0), arb(0)], 1e-15)


def test_held_mode_at_half_the_rate() -> None:
    """Step response (1 - cos(pi n))/w^2: 2 v/(1 + v) over w^2 (hold tables with c = -1)."""
    sections = sampled(undamped("0.5"), 1, "zero-order-hold").sections(60)
    with working_bits(BITS):
        square = arb.pi() ** 2
        assert overlap(pulse(sections, 5), [arb(0), 2 / square, -2 / square, 2 / square, -2 / square], 1e-15)


@pytest.mark.parametrize("method", METHODS)
@pytest.mark.parametrize("gain", ["1e-330", "1e330"])
def test_gains_beyond_the_doubles(method: str, gain: str) -> None:
    plain = sampled(ratio(["1"], ["1", "2", "3"]), 10, method).sections(100)
    scaled = sampled(ratio([gain], ["1", "2", "3"]), 10, method).sections(100)
    with working_bits(BITS):
        for x, y in zip(scaled, plain, strict=True):
            undone = [value / arb(exact(gain)) for value in x.b]
            assert overlap(undone, y.b, 1e-29)
            assert overlap(x.a, y.a, 1e-29)


def test_mode_that_has_died_before_the_next_sample() -> None:
    """A pair 200 times as fast as the rate, e^(-1256) of it left: below every double, and still a filter."""
    fast = blocks(schema.SecondOrder(corner_hz=fmpq(200), quality=exact("0.6")))
    (section,) = sampled(fast, 1, "impulse-invariant").sections(60)
    with working_bits(BITS):
        assert overlap([section.b_at_one / section.b[1]], [arb(1)], 1e-15)
        expected = evaluate(fast.response_modes(), fmpq(1))
        assert (section.b[1] / expected).overlaps(arb(1))


def test_impulse_response_between_samples_needs_no_extra_pole() -> None:
    """A lag half a sample late: g[n] = T h(nT - T/2) is a first-order filter, T h(T/2) v/(1 - E v)."""
    late = blocks(schema.Lag(corner_hz=fmpq(1)), schema.DeadTime(delay_s=exact("0.05")))
    (section,) = sampled(late, 10, "impulse-invariant").sections(100)
    assert section.order == 1
    with working_bits(BITS):
        pole = 2 * arb.pi()
        assert overlap(section.b, [arb(0), pole / 10 * (-pole / 20).exp(), arb(0)])
        assert overlap(section.a, [arb(1), -(-pole / 10).exp(), arb(0)])


def test_notch_that_folds_onto_zero_frequency() -> None:
    """Matched at a rate equal to the notch: its zeros fall on z = 1, where the gain was to be matched."""
    notch = blocks(schema.Notch(center_hz=fmpq(100), quality=fmpq(10)))
    with pytest.raises(Refused, match="100"):
        sampled(notch, 100, "matched").sections(60)


@pytest.mark.parametrize("order", [1, 3, 6])
def test_zero_next_to_the_origin(order: int) -> None:
    """A pole at -1000 rad/s sampled at 1 Hz leaves a zero of the size e^-1000 beside ordinary ones."""
    model = blocks(
        schema.Highpass(family="butterworth", order=order, corner_hz=exact("0.1")),
        schema.RcHighpass(ohm=fmpq(1), farad=exact("1e-3")),
    )
    values = pulse(sampled(model, 1, "impulse-invariant").sections(120), 6)
    with working_bits(4096):
        response = [evaluate(model.response_modes(), fmpq(n)) for n in range(6)]
        expected = [response[0] / 2 + model.feedthrough(), *response[1:]]
    assert overlap(values, expected)


def test_damped_mode_at_the_rate() -> None:
    """Poles -40 +- 20j Hz at 1 Hz: both images are the same real number, which has no sum of simple terms."""
    model = blocks(
        schema.Bandpass(family="butterworth", order=1, low_hz=fmpq(20), high_hz=fmpq(100)),
        schema.Lag(corner_hz=fmpq(1)),
    )
    assert sorted(round(float(root.evaluate().imag) / 6.283185307179586, 9) for root in model.poles) == [0.0, 20.0]
    filtered = sampled(model, 1, "zero-order-hold")
    assert filtered.parallel(60) is None
    values = pulse(filtered.sections(100), 4)
    with working_bits(BITS):
        step = [evaluate(model.response_modes(1), fmpq(n)) for n in range(4)]
        assert overlap(values, [step[0], *(step[n] - step[n - 1] for n in range(1, 4))])
