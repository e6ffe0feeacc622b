"""Every block type against its formula, evaluated by mpmath at 100 digits."""

from collections.abc import Callable
from typing import Any

import mpmath
import pytest
from flint import acb, arb, fmpq, fmpq_poly
from hypothesis import given
from hypothesis import strategies as st

from afterkick.design import schema
from afterkick.model.blocks import block_factors
from afterkick.model.factors import Factors, product
from afterkick.model.families import bandpass, bandstop, highpass, lowpass, prototype
from afterkick.model.roots import HERTZ, RADIANS, ZERO, algebraic_roots, cancel, count, values
from afterkick.numbers import accurate, working_bits

mp = mpmath.MPContext()
mp.dps = 100


def mpf(value: fmpq | arb) -> mpmath.mpf:
    if isinstance(value, fmpq):
        return mp.mpf(int(value.p)) / int(value.q)
    mantissa, exponent = value.mid().man_exp()
    return mp.mpf(int(mantissa)) * mp.mpf(2) ** int(exponent)


def exact(low: str, high: str) -> st.SearchStrategy[fmpq]:
    return st.decimals(low, high, places=4).map(lambda value: fmpq(*value.as_integer_ratio()))


POSITIVE = exact("0.0001", "5000")
ANY = exact("-500", "500")
NONZERO = ANY.filter(bool)
OPTIONAL = st.none() | POSITIVE


def response(factors: Factors, s: acb) -> acb:
    total = acb(factors.gain.value()) * (-s * arb(factors.dead_time_s)).exp()
    for value, times in values(factors.zeros):
        total *= (s - value) ** times
    for value, times in values(factors.poles):
        total /= (s - value) ** times
    return total


def w(hertz: fmpq) -> mpmath.mpf:
    return 2 * mp.pi * mpf(hertz)


def polynomial(coefficients: tuple[fmpq, ...], s: mpmath.mpc) -> mpmath.mpc:
    return sum(mpf(c) * s**k for k, c in enumerate(reversed(coefficients)))


def lag(block: schema.Lag, s: mpmath.mpc) -> mpmath.mpc:
    return 1 / (1 + s * mpf(block.time_constant_s)) if block.time_constant_s else 1 / (1 + s / w(block.corner_hz))


def notch(block: schema.Notch, s: mpmath.mpc) -> mpmath.mpc:
    depth = mp.mpf(0) if block.depth_db is None else mp.mpf(10) ** (-mpf(block.depth_db) / 20)
    w0 = w(block.center_hz)
    width = w0 / mpf(block.quality)
    return (s**2 + depth * width * s + w0**2) / (s**2 + width * s + w0**2)


def second_order(block: schema.SecondOrder, s: mpmath.mpc) -> mpmath.mpc:
    w0 = w(block.corner_hz)
    return w0**2 / (s**2 + w0 / mpf(block.quality) * s + w0**2)


def resonator(block: schema.Resonator, s: mpmath.mpc) -> mpmath.mpc:
    width = w(block.bandwidth_hz) * s
    return mpf(block.gain) * width / (s**2 + width + w(block.center_hz) ** 2)


def pid(block: schema.Pid, s: mpmath.mpc) -> mpmath.mpc:
    derivative = s if block.derivative_corner_hz is None else s / (1 + s / w(block.derivative_corner_hz))
    return mpf(block.kp) + mpf(block.ki) / s + mpf(block.kd) * derivative


FORMULAS: dict[type, Callable[[Any, mpmath.mpc], mpmath.mpc]] = {
    schema.Gain: lambda block, s: mpf(block.gain),
    schema.Integrator: lambda block, s: mpf(block.gain) / s,
    schema.Lag: lag,
    schema.LeadLag: lambda block, s: mpf(block.gain) * (1 + s / w(block.zero_hz)) / (1 + s / w(block.pole_hz)),
    schema.SecondOrder: second_order,
    schema.Notch: notch,
    schema.Resonator: resonator,
    schema.Pid: pid,
    schema.Ratio: lambda block, s: polynomial(block.numerator, s) / polynomial(block.denominator, s),
    schema.RcLowpass: lambda block, s: 1 / (1 + s * mpf(block.ohm) * mpf(block.farad)),
    schema.RcHighpass: lambda block, s: 1 - 1 / (1 + s * mpf(block.ohm) * mpf(block.farad)),
    schema.DeadTime: lambda block, s: mp.exp(-s * mpf(block.delay_s)),
}
COEFFICIENTS = st.lists(ANY, min_size=1, max_size=5).map(tuple).filter(lambda listed: bool(listed[0]))
BLOCKS: dict[type, st.SearchStrategy[Any]] = {
    schema.Gain: st.builds(schema.Gain, NONZERO),
    schema.Integrator: st.builds(schema.Integrator, NONZERO),
    schema.Lag: st.builds(schema.Lag, time_constant_s=POSITIVE) | st.builds(schema.Lag, corner_hz=POSITIVE),
    schema.LeadLag: st.builds(schema.LeadLag, POSITIVE, POSITIVE, NONZERO),
    schema.SecondOrder: st.builds(schema.SecondOrder, POSITIVE, POSITIVE),
    schema.Notch: st.builds(
        schema.Notch, POSITIVE, POSITIVE, st.none() | exact("0.1", "200") | st.sampled_from([fmpq(20), fmpq(60)])
    ),
    schema.Resonator: st.builds(schema.Resonator, POSITIVE, POSITIVE, NONZERO),
    schema.Pid: st.builds(schema.Pid, *[st.just(fmpq(0)) | ANY] * 3, OPTIONAL).filter(
        lambda block: any((block.kp, block.ki, block.kd))
    ),
    schema.Ratio: st.builds(schema.Ratio, COEFFICIENTS, COEFFICIENTS),
    schema.RcLowpass: st.builds(schema.RcLowpass, POSITIVE, POSITIVE),
    schema.RcHighpass: st.builds(schema.RcHighpass, POSITIVE, POSITIVE),
    schema.DeadTime: st.builds(schema.DeadTime, POSITIVE),
}


@pytest.mark.parametrize("kind", FORMULAS, ids=lambda kind: kind.__name__)
@given(data=st.data(), hertz=exact("0.001", "5000"))
def test_block_is_its_formula(kind: type, data: st.DataObject, hertz: fmpq) -> None:
    block = data.draw(BLOCKS[kind])
    hertz += fmpq(1, 30000)  # never the exact zero of a notch
    s = mp.mpc(0, w(hertz))
    expected = FORMULAS[kind](block, s)
    with working_bits(512):
        found = response(block_factors(block), acb(0, 2 * arb.pi() * arb(hertz)))
        assert accurate(found, 200)
    difference = abs(mp.mpc(mpf(found.real), mpf(found.imag)) - expected)
    assert difference <= mp.mpf(10) ** -50 * abs(expected)


@given(data=st.data())
@pytest.mark.parametrize("kind", FORMULAS, ids=lambda kind: kind.__name__)
def test_dc_gain_is_exact(kind: type, data: st.DataObject) -> None:
    """None just where the response at zero frequency is no finite number other than zero."""
    block = data.draw(BLOCKS[kind])
    factors = block_factors(block)
    zeros, poles, _ = cancel(factors.zeros, factors.poles)
    if factors.dc_gain is None:
        assert ZERO in {**factors.zeros, **factors.poles}
    else:
        assert ZERO not in {**zeros, **poles}
        with working_bits(256):
            assert response(factors, acb(0)).real.overlaps(arb(factors.dc_gain))


def shape(**keys: fmpq) -> Factors:
    return block_factors(schema.Pid(**keys))


def test_controller_without_integral_has_no_pole_at_the_origin() -> None:
    corner = fmpq(10)
    for factors in (
        shape(kp=fmpq(2)),
        shape(kp=fmpq(2), kd=fmpq(3)),
        shape(kd=fmpq(3)),
        shape(kp=fmpq(2), kd=fmpq(3), derivative_corner_hz=corner),
        shape(kd=fmpq(3), derivative_corner_hz=corner),
    ):
        assert ZERO not in factors.poles
    for factors in (
        shape(ki=fmpq(2)),
        shape(kp=fmpq(1), ki=fmpq(2)),
        shape(ki=fmpq(2), kd=fmpq(3)),
        shape(ki=fmpq(2), kd=fmpq(3), derivative_corner_hz=corner),
    ):
        assert factors.poles[ZERO] == 1
        assert ZERO not in factors.zeros


def test_controller_by_its_terms() -> None:
    corner = fmpq(10)
    assert shape(kd=fmpq(3)).zeros == {ZERO: 1}
    assert shape(kd=fmpq(3), derivative_corner_hz=corner).zeros == {ZERO: 1}
    assert shape(kd=fmpq(3), derivative_corner_hz=corner).poles == algebraic_roots(fmpq_poly([10, 1]), HERTZ)
    assert shape(kp=fmpq(2), ki=fmpq(3)).zeros == algebraic_roots(fmpq_poly([3, 2]), RADIANS)
    ideal = shape(kp=fmpq(1), ki=fmpq(2), kd=fmpq(3))
    assert (count(ideal.zeros), ideal.order) == (2, 1)
    assert shape(kp=fmpq(5), kd=fmpq(3), derivative_corner_hz=corner).dc_gain == 5


def test_controllers_in_proportion_share_their_zeros() -> None:
    one = shape(kp=fmpq(1), ki=fmpq(2), kd=fmpq(3), derivative_corner_hz=fmpq(10))
    other = shape(kp=fmpq(5), ki=fmpq(10), kd=fmpq(15), derivative_corner_hz=fmpq(10))
    assert one.zeros == other.zeros
    assert one.zeros != shape(kp=fmpq(1), ki=fmpq(2), kd=fmpq(3), derivative_corner_hz=fmpq(11)).zeros


def test_notch_depth_and_quality_name_one_numerator() -> None:
    """20 dB less depth and a tenth of the bandwidth give the same zeros; 20 dB give rational coefficients."""
    deep = block_factors(schema.Notch(fmpq(50), fmpq(2), fmpq(26)))
    shallow = block_factors(schema.Notch(fmpq(50), fmpq(20), fmpq(6)))
    assert deep.zeros == shallow.zeros
    twenty = block_factors(schema.Notch(fmpq(50), fmpq(2), fmpq(20)))
    assert twenty.zeros == algebraic_roots(fmpq_poly([2500, fmpq(5, 2), 1]), HERTZ)
    assert twenty.zeros == shallow.poles
    assert deep.dc_gain == twenty.dc_gain == 1


def test_full_notch_has_zeros_on_the_axis() -> None:
    ((zero, times),) = block_factors(schema.Notch(fmpq(50), fmpq(3))).zeros.items()
    assert times == 1
    assert zero.evaluate().real.is_zero()


def test_critical_second_order_is_a_double_lag() -> None:
    half = block_factors(schema.SecondOrder(fmpq(10), fmpq(1, 2)))
    assert half.poles == product([block_factors(schema.Lag(corner_hz=fmpq(10)))] * 2).poles


def test_lag_and_lowpass_cancel_against_a_lead() -> None:
    """The pole at 10 Hz that an order-3 Butterworth filter has is the zero of the lead."""
    whole = product(
        [
            block_factors(schema.LeadLag(fmpq(10), fmpq(99))),
            block_factors(schema.Lowpass("butterworth", 3, fmpq(10))),
        ]
    )
    zeros, poles, common = cancel(whole.zeros, whole.poles)
    assert (zeros, count(poles), count(common)) == ({}, 3, 1)


@pytest.mark.parametrize("family", schema.FAMILIES)
def test_family_blocks(family: str) -> None:
    ripple, stop = fmpq(1), fmpq(40)
    expected = prototype(family, 4, ripple, stop)
    low, high = fmpq(3), fmpq(8)
    pairs = [
        (schema.Lowpass(family, 4, low, ripple, stop), lowpass(expected, low)),
        (schema.Highpass(family, 4, low, ripple, stop), highpass(expected, low)),
        (schema.Bandpass(family, 4, low, high, ripple, stop), bandpass(expected, low, high)),
        (schema.Bandstop(family, 4, low, high, ripple, stop), bandstop(expected, low, high)),
    ]
    for block, factors in pairs:
        found = block_factors(block)
        assert (found.zeros, found.poles, found.dc_gain) == (factors.zeros, factors.poles, factors.dc_gain)
        assert found.gain.value().overlaps(factors.gain.value())


def test_every_block_type_is_covered() -> None:
    families = {schema.Lowpass, schema.Highpass, schema.Bandpass, schema.Bandstop}
    assert set(FORMULAS) | families == set(schema.BLOCK_TYPES.values())
