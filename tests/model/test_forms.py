"""The five forms of the design file: the same system written five ways is one model."""

from collections.abc import Sequence
from fractions import Fraction

import pytest
from flint import acb, arb, fmpq

from afterkick.design import schema
from afterkick.errors import Refused
from afterkick.model.model import Model
from afterkick.numbers import working_bits
from helpers import Exact, exact, model_from, root_floats


def numbers(values: Sequence[Exact]) -> tuple[fmpq, ...]:
    return tuple(exact(value) for value in values)


def ode(output: Sequence[Exact], input_: Sequence[Exact], before: Sequence[Exact] = ()) -> Model:
    return model_from(schema.OdeForm(output=numbers(output), input=numbers(input_), before=numbers(before)))


def ratio(numerator: Sequence[Exact], denominator: Sequence[Exact]) -> Model:
    return model_from(schema.RatioForm(numerator=numbers(numerator), denominator=numbers(denominator)))


def roots(
    poles: Sequence[tuple[Exact, Exact]],
    zeros: Sequence[tuple[Exact, Exact]] = (),
    gain: Exact = 1,
    unit: str = "rad/s",
) -> Model:
    pairs = [tuple((exact(re), exact(im)) for re, im in listed) for listed in (poles, zeros)]
    return model_from(schema.RootsForm(poles=pairs[0], zeros=pairs[1], gain=exact(gain), unit=unit))


def matrices(a: Sequence[Sequence[Exact]], b: Sequence[Exact], c: Sequence[Exact], d: Exact = 0) -> Model:
    return model_from(schema.MatricesForm(a=tuple(numbers(row) for row in a), b=numbers(b), c=numbers(c), d=exact(d)))


def product(*listed: schema.Block) -> Model:
    return model_from(schema.BlocksForm(block=listed))


def same(models: Sequence[Model]) -> None:
    """Equal exact poles and zeros, overlapping gains, equal rational gain at s = 0 where it exists."""
    first, *others = models
    for other in others:
        assert other.poles == first.poles
        assert other.zeros == first.zeros
        assert other.dc_gain == first.dc_gain
        assert other.dead_time_s == first.dead_time_s
        with working_bits(300):
            assert other.gain.value().overlaps(first.gain.value())
            assert other.gain.value().rad() < arb("1e-60")


def test_second_order_with_a_zero() -> None:
    """2 (s + 3)/(s^2 + 2s + 5): poles -1 +- 2j."""
    same(
        [
            ode([1, 2, 5], [2, 6]),
            ode(["0.5", 1, "2.5"], [1, 3]),
            ratio([2, 6], [1, 2, 5]),
            roots([(-1, 2)], [(-3, 0)], gain=2),
            matrices([[0, 1], [-5, -2]], [0, 1], [6, 2]),
            matrices([[-1, 2], [-2, -1]], [0, 1], [2, 2]),
            product(schema.Ratio(numerator=numbers([1, 3]), denominator=numbers([1, 2, 5])), schema.Gain(gain=fmpq(2))),
        ]
    )
    model = ratio([2, 6], [1, 2, 5])
    assert root_floats(model.poles) == pytest.approx([-1 - 2j, -1 + 2j])
    assert root_floats(model.zeros) == pytest.approx([-3])
    assert model.dc_gain == fmpq(6, 5)


def test_feedthrough_repeated_and_integrating_poles() -> None:
    """(s + 1)(s + 4)(s + 7)/(s (s + 2)^2), feedthrough 1."""
    same(
        [
            ode([1, 4, 4, 0], [1, 12, 39, 28]),
            ratio([1, 12, 39, 28], [1, 4, 4, 0]),
            roots([(0, 0), (-2, 0), (-2, 0)], [(-1, 0), (-4, 0), (-7, 0)]),
            matrices([[-4, -4, 0], [1, 0, 0], [0, 1, 0]], [1, 0, 0], [8, 35, 28], d=1),
            product(
                schema.Integrator(),
                *[schema.Lag(time_constant_s=exact("0.5"))] * 2,
                schema.Ratio(numerator=numbers([1, 12, 39, 28]), denominator=numbers([4])),
            ),
        ]
    )
    model = ratio([1, 12, 39, 28], [1, 4, 4, 0])
    assert sorted(model.poles.values()) == [1, 2]
    assert model.poles_at_origin == 1
    assert model.dc_gain is None
    assert model.dc_gain_ball() is None
    with working_bits(128):
        assert model.origin_coefficient().overlaps(arb(7))
        assert model.feedthrough() == 1


def test_hertz_and_radians() -> None:
    """A lag at 5 Hz as roots in Hz and as blocks; gain of a Hz form is the factor in front of rad/s factors."""
    lag = product(schema.Lag(corner_hz=fmpq(5)))
    in_hertz = roots([(-5, 0)], unit="Hz")
    assert in_hertz.poles == lag.poles
    with working_bits(200):
        corner = 2 * arb.pi() * 5
        assert lag.gain.value().overlaps(corner)
        assert in_hertz.gain.value() == 1
        assert (next(iter(lag.poles)).evaluate().real + corner).contains(0)
        assert in_hertz.dc_gain_ball().overlaps(1 / corner)
    assert lag.dc_gain == 1
    # 2 pi is transcendental: 5 Hz is no rational number of rad/s
    assert not set(lag.poles) & set(ratio([1], [1, "31.4159265358979323846264338327950288419716939937510"]).poles)


def test_equal_excess_keeps_the_gain_in_hertz() -> None:
    """(x + 1)/(x + 4) in Hz: the unit cancels, and H(0) = 1/4 exactly."""
    model = roots([(-4, 0)], [(-1, 0)], unit="Hz")
    lead = product(schema.LeadLag(zero_hz=fmpq(1), pole_hz=fmpq(4), gain=fmpq(1, 4)))
    same([model, lead])
    assert model.dc_gain == fmpq(1, 4)


def test_matrices_that_hide_states() -> None:
    """A state that u can't reach is a cancelled pair, named; the model is of the order that is left."""
    model = matrices([[-1, 0], [0, -2]], [1, 0], [3, 4])
    same([model, ratio([3], [1, 1])])
    ((root, times),) = model.cancelled
    assert (root.text(), times) == ("-2 rad/s", 1)


def test_matrices_against_the_definition() -> None:
    """d + c (sI - A)^-1 b solved in rationals at s = 3, an order-4 system without structure."""
    a = [["1", "-2", "0.5", "0"], ["3", "-4", "1", "1"], ["0", "1", "-2.5", "2"], ["1", "0", "-1", "-3"]]
    b, c, d = ["1", "0", "2", "-1"], ["0.5", "1", "0", "2"], "0.75"
    rows = [[Fraction(3 if i == j else 0) - Fraction(a[i][j]) for j in range(4)] + [Fraction(b[i])] for i in range(4)]
    for i in range(4):
        pivot = next(k for k in range(i, 4) if rows[k][i])
        rows[i], rows[pivot] = rows[pivot], rows[i]
        rows[i] = [value / rows[i][i] for value in rows[i]]
        for k in range(4):
            if k != i:
                rows[k] = [x - rows[k][i] * y for x, y in zip(rows[k], rows[i], strict=True)]
    expected = Fraction(d) + sum(Fraction(c[i]) * rows[i][4] for i in range(4))
    model = matrices(a, b, c, d)
    with working_bits(300):
        found = model.at(acb(3)).real
        assert found.overlaps(arb(exact(expected)))
        assert found.rad() < arb("1e-60")


def test_equal_blocks_share_their_poles() -> None:
    """Two lags of one corner are a double pole; a Butterworth low-pass of order 3 contains the lag of its corner."""
    assert list(product(*[schema.Lag(corner_hz=exact("7.3"))] * 2).poles.values()) == [2]
    with_lag = product(
        schema.Lag(corner_hz=exact("7.3")), schema.Lowpass(family="butterworth", order=3, corner_hz=exact("7.3"))
    )
    assert sorted(with_lag.poles.values()) == [1, 2]
    resistor = product(schema.RcLowpass(ohm=fmpq(1000), farad=exact("1e-6")), schema.Lag(time_constant_s=exact("1e-3")))
    assert list(resistor.poles.values()) == [2]


def test_blocks_cancel_across_blocks() -> None:
    """A lead that undoes a lag: named, and gone."""
    model = product(
        schema.Lag(corner_hz=fmpq(3)), schema.LeadLag(zero_hz=fmpq(3), pole_hz=fmpq(50)), schema.Lag(corner_hz=fmpq(9))
    )
    same([model, product(schema.Lag(corner_hz=fmpq(50)), schema.Lag(corner_hz=fmpq(9)))])
    assert len(model.cancelled) == 1


def test_dead_time_adds_up() -> None:
    lag = schema.Lag(corner_hz=fmpq(1))
    model = product(schema.DeadTime(delay_s=exact("0.1")), lag, schema.DeadTime(delay_s=exact("0.2")))
    assert model.dead_time_s == fmpq(3, 10)
    with working_bits(200):
        s = acb(0, 4)
        assert model.at(s).overlaps(product(lag).at(s) * (-s * fmpq(3, 10)).exp())


@pytest.mark.parametrize(
    "form",
    [
        schema.OdeForm(output=numbers([1, 1]), input=numbers([0])),
        schema.RatioForm(numerator=numbers([0, 0]), denominator=numbers([1, 1])),
        schema.MatricesForm(a=(numbers([-1]),), b=numbers([0]), c=numbers([1])),
    ],
    ids=["ode", "ratio", "matrices"],
)
def test_transfer_function_that_is_zero(form: schema.ModelForm) -> None:
    with pytest.raises(Refused, match="a transfer function that is zero"):
        model_from(form)


@pytest.mark.parametrize("order", [1, 16])
def test_lowest_and_highest_order(order: int) -> None:
    assert ratio([1], [1, *[0] * (order - 1), 7]).order == order


def test_orders_that_are_refused() -> None:
    with pytest.raises(Refused, match=r"order 0; accepted: order 1 to 16; remedy: a pure gain"):
        product(schema.Gain(gain=fmpq(3)), schema.DeadTime(delay_s=fmpq(1)))
    with pytest.raises(Refused, match="order 0 after cancellation"):
        ratio([2, 6], [1, 3])
    with pytest.raises(Refused, match=r"order 17; accepted: order 1 to 16; remedy: split"):
        ratio([1], [1, *[0] * 16, 7])
    # 17 poles, one of them cancelled, are 16
    assert ratio([1, 1], [1, 2, 1, *[0] * 13, 1, 1]).order == 16
