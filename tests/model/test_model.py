"""The exact model: roots and multiplicities, cancellation, jumps, free response, closed forms."""

from collections.abc import Sequence
from fractions import Fraction
from math import cos, exp, sin, sqrt

import numpy as np
import pytest
import scipy.integrate
import scipy.signal
from flint import acb, arb, fmpq, fmpq_poly
from hypothesis import given, settings
from hypothesis import strategies as st

from afterkick.design import schema
from afterkick.errors import Refused
from afterkick.model.factors import Factors, Gain
from afterkick.model.model import Model, build
from afterkick.model.partial_fractions import evaluate
from afterkick.model.roots import Root, algebraic_roots, quadratic_roots
from afterkick.numbers import working_bits
from helpers import Exact, blocks, exact, model_from, polynomial, ratio, root_floats

few = settings(max_examples=30, deadline=None, database=None, print_blob=True)
small = st.integers(-12, 12).map(lambda k: fmpq(k, 4))
nonzero = small.filter(lambda value: value != 0)


def ode(output: Sequence[Exact], input_: Sequence[Exact], before: Sequence[Exact] = ()) -> Model:
    lists = [tuple(exact(value) for value in listed) for listed in (output, input_, before)]
    return model_from(schema.OdeForm(output=lists[0], input=lists[1], before=lists[2]))


def multiplicities(model: Model) -> list[int]:
    return sorted(model.poles.values())


# Roots


def test_multiplicities_are_exact() -> None:
    """(s + 1/3)^3 (s^2 + s + 2)^2 (s^3 - 2)^1, expanded: no root finder sees more than a cluster."""
    parts = [fmpq_poly([fmpq(1, 3), 1])] * 3 + [fmpq_poly([2, 1, 1])] * 2 + [fmpq_poly([-2, 0, 0, 1])]
    whole = fmpq_poly([1])
    for part in parts:
        whole *= part
    found = algebraic_roots(whole, "rad/s")
    assert sorted((root.degree, times) for root, times in found.items()) == [(1, 1), (1, 3), (2, 1), (2, 2)]
    with working_bits(200):
        for root in found:
            value = root.evaluate()
            assert min(abs(whole_at(part, value)).mid() for part in parts) < arb("1e-50")


def whole_at(part: fmpq_poly, value: acb) -> acb:
    total = acb(0)
    for coefficient in reversed(part.coeffs()):
        total = total * value + arb(coefficient)
    return total


def test_nearly_equal_poles_are_two() -> None:
    """-1 and -1 - 1e-30 are told apart and stay simple; -1 and -1 are double."""
    assert multiplicities(ratio([1], [1, "2.000000000000000000000000000001", "1.000000000000000000000000000001"])) == [
        1,
        1,
    ]
    assert multiplicities(ratio([1], [1, 2, 1])) == [2]


@pytest.mark.parametrize(
    ("denominator", "on_axis", "sign_pattern"),
    [
        # s^4 + 3 s^2 + 1: two undamped pairs at irrational frequencies, sqrt((3 +- sqrt 5)/2)
        ([1, 0, 3, 0, 1], [0.6180339887498949, 1.618033988749895], [0, 0]),
        # s^4 - 2: one undamped pair at 2^(1/4), and +-2^(1/4)
        ([1, 0, 0, 0, -2], [2**0.25], [-1, 0, 1]),
        # s^6 + 2 s^4 + 5 s^2 + 1 has one undamped pair and two pairs off the axis
        ([1, 0, 2, 0, 5, 0, 1], [0.46557], [-1, 0, 1]),
        ([1, 0, 9], [3.0], [0]),
    ],
    ids=["biquadratic", "fourth root", "sixth degree", "quadratic"],
)
def test_roots_on_the_imaginary_axis_are_found_exactly(
    denominator: list[int], on_axis: list[float], sign_pattern: list[int]
) -> None:
    """The real part is the point zero, whatever the working precision."""
    model = ratio([1], denominator)
    assert sorted(model.signs.values()) == sign_pattern
    for bits in (53, 1000):
        with working_bits(bits):
            heights = [root.evaluate() for root, sign in model.signs.items() if sign == 0]
            assert all(value.real.is_zero() for value in heights)
    assert sorted(float(value.imag) for value in heights) == pytest.approx(on_axis, rel=1e-4)
    assert np.poly(root_floats(model.poles)) == pytest.approx(np.array(denominator, float), abs=1e-12)


def test_roots_that_cannot_be_told_apart() -> None:
    """The same number under two descriptions: refused, not guessed."""
    one = Root(("first",), True, lambda: acb(-arb(2).sqrt()))
    other = Root(("second",), True, lambda: acb(-2 / arb(2).sqrt()))
    with pytest.raises(Refused, match="can't be told apart"):
        build(Factors({one: 1}, {other: 1, Root(("third",), True, lambda: acb(-5)): 1}, Gain()))
    with pytest.raises(Refused, match="can't be told apart"):
        build(Factors({}, {one: 1, other: 1}, Gain()))
    # 1e-40 apart is enough
    beside = Root(("second",), True, lambda: acb(-arb(2).sqrt() - arb("1e-40")))
    assert build(Factors({}, {one: 1, beside: 1}, Gain())).order == 2


@pytest.mark.parametrize(
    ("coefficients", "kinds"),
    [((1, 2, 5), [(False, 1)]), ((1, 2, 1), [(True, 2)]), ((2, 6, 4), [(True, 1), (True, 1)])],
)
def test_quadratics_with_ball_coefficients(coefficients: tuple[int, ...], kinds: list[tuple[bool, int]]) -> None:
    found = quadratic_roots(lambda: tuple(arb(c) for c in coefficients), ("test", coefficients))
    assert sorted((root.real, times) for root, times in found.items()) == kinds
    values = np.concatenate([np.atleast_1d(root_floats({root: times})) for root, times in found.items()])
    assert np.sort_complex(values) == pytest.approx(np.sort_complex(np.roots(coefficients)), abs=1e-12)


@pytest.mark.parametrize(
    ("denominator", "expected"),
    [
        ([1, 3, 2], "stable"),
        ([1, 1, 0], "marginal"),
        ([1, 0, 4], "marginal"),
        ([1, 0, 0], "unstable"),
        ([1, 0, 8, 0, 16], "unstable"),
        ([1, -1, 4], "unstable"),
        ([1, 0, 3, 0, 1], "marginal"),
    ],
    ids=str,
)
def test_stability(denominator: list[int], expected: str) -> None:
    """Simple poles on the imaginary axis are marginal, repeated ones grow (common practice)."""
    assert ratio([1], denominator).stability == expected


# Cancellation


def test_cancellation_is_exact_and_named() -> None:
    model = ratio([1, 5, 6], [1, 7, 16, 12])
    assert sorted((root.text(), times) for root, times in model.cancelled) == [("-2 rad/s", 1), ("-3 rad/s", 1)]
    assert root_floats(model.poles) == pytest.approx([-2])
    assert model.order == 1
    assert model.dc_gain == fmpq(1, 2)
    assert model.warnings == ()
    # an irrational pair, s^2 + s + 3
    pair = ratio([1, 1, 3], [1, 3, 5, 6])
    ((root, times),) = pair.cancelled
    assert (root.degree, times) == (2, 1)
    assert pair.order == 1


def test_nearly_equal_is_not_cancelled() -> None:
    model = ratio([1, "2.0000000000000000000000001"], [1, 5, 6])
    assert model.cancelled == ()
    assert model.order == 2


def test_unstable_cancellation_is_refused() -> None:
    with pytest.raises(Refused, match="an unstable pole at 2 rad/s that a zero cancels exactly"):
        ratio([1, -2], [1, 1, -6])
    with pytest.raises(Refused, match=r"0\.5 ± 1\.65831j rad/s"):
        ratio([1, -1, 3], [1, 0, 2, 3])


def test_cancellation_on_the_axis_warns() -> None:
    model = ratio([1, 0], [1, 3, 0])
    assert model.order == 1
    (warning,) = model.warnings
    assert "at 0 rad/s" in warning
    (warning,) = ratio([1, 0, 4], [1, 1, 4, 4]).warnings
    assert "0 ± 2j rad/s" in warning


def test_initial_values_that_excite_a_cancelled_mode() -> None:
    """y'' + 3y' + 2y = u' + u hides e^(-t): y(0-) = 1, y'(0-) = -2 is e^(-2t) alone, anything else stirs it."""
    model = ode([1, 3, 2], [1, 1], [1, -2])
    assert model.order == 1
    assert len(model.cancelled) == 1
    assert model.free is not None
    with working_bits(128):
        assert evaluate(model.free.modes(), fmpq(1)).overlaps((arb(-2)).exp())
    with pytest.raises(Refused, match="initial values that excite the cancelled pole at -1 rad/s"):
        ode([1, 3, 2], [1, 1], [1, 0])
    assert ode([1, 3, 2], [1, 1]).free is None


def test_unstable_and_excited_are_reported_together() -> None:
    with pytest.raises(Refused) as caught:
        ode([1, 1, -2], [1, -1], [1, 1])
    assert [problem.where for problem in caught.value.problems] == ["model", "model.before"]


# Markov parameters and jumps


def long_division(numerator: Sequence[fmpq], denominator: Sequence[fmpq], number: int) -> list[Fraction]:
    """m0, m1, ... of numerator/denominator in powers of 1/s, by long division in fractions; highest power first."""
    order = len(denominator) - 1
    rest = [Fraction(0)] * (order + 1 - len(numerator)) + [Fraction(int(x.p), int(x.q)) for x in numerator]
    by = [Fraction(int(x.p), int(x.q)) for x in denominator]
    rest += [Fraction(0)] * number
    found = []
    for k in range(number):
        found.append(rest[k] / by[0])
        for j, value in enumerate(by):
            rest[k + j] -= found[-1] * value
    return found


@given(
    denominator=st.lists(small, min_size=1, max_size=6),
    leading=nonzero,
    numerator=st.lists(small, min_size=1, max_size=7),
)
@few
def test_markov_parameters_by_long_division(denominator: list[fmpq], leading: fmpq, numerator: list[fmpq]) -> None:
    """H(s) = m0 + m1/s + m2/s^2 + ..., exact cancellation or not."""
    bottom = [leading, *denominator]
    top = numerator[: len(bottom)]
    if not any(top):
        top = [fmpq(1)]
    try:
        model = ratio(top, bottom)
    except Refused:
        return  # cancelled down to nothing, or unstable
    expected = long_division(top, bottom, 9)
    with working_bits(256):
        found = model.markov_parameters(8)
        for x, y in zip(found, expected, strict=True):
            assert x.overlaps(arb(exact(y)))
            assert x.rad() < arb("1e-50")
        assert all(x.is_zero() for x in found[: model.relative_degree])


@pytest.mark.parametrize("order", [1, 2, 3, 5, 8])
def test_only_the_highest_derivative_jumps_without_input_derivatives(order: int) -> None:
    """a_n y^(n) + ... = b0 u: an impulse makes y^(n-1) jump by b0/a_n and leaves the lower ones (common practice)."""
    b0, a_n = fmpq(3), fmpq(7, 2)
    model = ode([a_n, *range(1, order + 1)], [b0])
    with working_bits(128):
        jumps = model.markov_parameters(order)[1:]
        assert all(jump.is_zero() for jump in jumps[:-1])
        assert jumps[-1].overlaps(arb(b0 / a_n))
        assert not jumps[-1].contains(0)


def test_jumps_with_input_derivatives() -> None:
    """y'' + 3y' + 2y = u' + 5u: y jumps by m1 = 1, y' by m2 = 5 - 3 = 2; the limits of the response at 0+ agree."""
    model = ode([1, 3, 2], [1, 5])
    with working_bits(400):
        _, m1, m2, m3 = model.markov_parameters(3)
        assert m1.overlaps(arb(1))
        assert m2.overlaps(arb(2))
        modes = model.response_modes()
        assert evaluate(modes, fmpq(0)).overlaps(m1)
        step = fmpq(1, 2**60)
        slope = (evaluate(modes, step) - evaluate(modes, fmpq(0))) / arb(step)
        assert abs(slope - m2) < abs(m3) * arb(step)


def test_feedthrough_is_apart_from_the_smooth_part() -> None:
    """(2s^2 + 3s + 4)/(s^2 + s + 1) = 2 + (s + 2)/(s^2 + s + 1): a Dirac of weight 2, and h(0+) = 1."""
    model, rest = ratio([2, 3, 4], [1, 1, 1]), ratio([1, 2], [1, 1, 1])
    with working_bits(200):
        assert model.feedthrough() == 2
        assert rest.feedthrough().is_zero()
        for time in (fmpq(0), fmpq(1, 3), fmpq(4)):
            assert evaluate(model.response_modes(), time).overlaps(evaluate(rest.response_modes(), time))
        assert evaluate(model.response_modes(), fmpq(0)).overlaps(arb(1))
        # the step response starts at the weight of the Dirac
        assert evaluate(model.response_modes(1), fmpq(0)).overlaps(arb(2))


# Free response


@pytest.mark.parametrize(
    ("output", "before", "expected"),
    [
        ([1, 2], [3], lambda t: 3 * exp(-2 * t)),
        ([2, 4], [3], lambda t: 3 * exp(-2 * t)),
        ([1, 0, 9], [1, 6], lambda t: cos(3 * t) + 2 * sin(3 * t)),
        ([1, 2, 1], [1, 0], lambda t: (1 + t) * exp(-t)),
        ([1, 0, 0], [2, -1], lambda t: 2 - t),
        ([1, 2, 5], [0, 4], lambda t: 2 * exp(-t) * sin(2 * t)),
        ([1, 0, 0, 0], [1, 1, 2], lambda t: 1 + t + t * t),
    ],
    ids=["decay", "not monic", "undamped", "critically damped", "drift", "damped", "triple integrator"],
)
def test_free_response_closed_forms(output: list[int], before: list[int], expected: object) -> None:
    """Homogeneous equations whose solutions are in every textbook (common practice)."""
    model = ode(output, [1], before)
    assert model.free is not None
    with working_bits(128):
        for time in (fmpq(0), fmpq(1, 4), fmpq(3)):
            found = float(evaluate(model.free.modes(), time))
            assert found == pytest.approx(expected(float(time.p) / float(time.q)), rel=1e-13, abs=1e-13)  # type: ignore[operator]


def test_free_response_by_integration() -> None:
    """scipy.integrate of a fourth-order equation with all initial values."""
    output, before = [2.0, 3.0, 11.0, 7.0, 5.0], [1.0, -2.0, 0.5, 3.0]
    model = ode([int(x) for x in output], [1], ["1", "-2", "0.5", "3"])

    def slope(_: float, y: np.ndarray) -> list[float]:
        highest = -sum(a * value for a, value in zip(output[:0:-1], y, strict=True)) / output[0]
        return [*y[1:], highest]

    times = np.linspace(0, 6, 13)
    solved = scipy.integrate.solve_ivp(slope, (0, 6), before, method="DOP853", t_eval=times, rtol=1e-12, atol=1e-13)
    assert model.free is not None
    with working_bits(128):
        found = [float(evaluate(model.free.modes(), fmpq(k, 2))) for k in range(13)]
    assert found == pytest.approx(solved.y[0], rel=1e-9, abs=1e-10)


def test_free_response_needs_fewer_modes_than_the_model() -> None:
    """Initial values along one mode leave the other at rest, exactly."""
    model = ode([1, 3, 2], [1], [1, -1])
    assert model.free is not None
    assert root_floats(model.free.poles) == pytest.approx([-1])
    assert model.order == 2


# Impulse, step and ramp response


WELL_SEPARATED = [
    (["3", "1"], ["1", "9", "23", "15"]),
    (["1", "0", "2"], ["1", "3", "7", "5"]),
    (["5"], ["1", "2", "17"]),
    (["1", "1"], ["1", "6", "8", "0"]),
]


@pytest.mark.parametrize(("numerator", "denominator"), WELL_SEPARATED, ids=str)
def test_residues(numerator: list[str], denominator: list[str]) -> None:
    """scipy.signal.residue, poles well apart."""
    residues, poles, _ = scipy.signal.residue([float(x) for x in numerator], [float(x) for x in denominator])
    model = ratio(numerator, denominator)
    with working_bits(128):
        modes = model.response_modes()
        found = [(complex(m.pole), complex(m.coefficients[0])) for m in modes]
    found += [(p.conjugate(), r.conjugate()) for (p, r), m in zip(found, modes, strict=True) if not m.real]

    def place(pair: tuple[complex, complex]) -> tuple[float, float]:
        return round(pair[0].real, 6), pair[0].imag

    expected = sorted(zip(poles, residues, strict=True), key=place)
    found.sort(key=place)
    for (p, r), (q, e) in zip(found, expected, strict=True):
        assert p == pytest.approx(q, abs=1e-9)
        assert r == pytest.approx(e, abs=1e-9)


@pytest.mark.parametrize(
    ("numerator", "denominator", "expected"),
    [
        (["1"], ["1", "0", "0"], lambda t: t),
        (["2"], ["1", "6", "12", "8"], lambda t: t * t * exp(-2 * t)),
        (["4"], ["1", "0", "16"], lambda t: sin(4 * t)),
        (["1", "0"], ["1", "0", "16"], lambda t: cos(4 * t)),
        (["1"], ["1", "0", "2", "0", "1"], lambda t: (sin(t) - t * cos(t)) / 2),
        (["1", "1"], ["1", "2", "10"], lambda t: exp(-t) * cos(3 * t)),
        (["-1", "1"], ["1", "3", "2"], lambda t: 2 * exp(-t) - 3 * exp(-2 * t)),
        (["1"], ["1", "0", "-2"], lambda t: (exp(sqrt(2) * t) - exp(-sqrt(2) * t)) / (2 * sqrt(2))),
    ],
    ids=["ramp", "triple pole", "sine", "cosine", "repeated undamped", "damped", "non-minimum phase", "unstable"],
)
def test_impulse_response_closed_forms(numerator: list[str], denominator: list[str], expected: object) -> None:
    """Pairs of any Laplace-transform table."""
    model = ratio(numerator, denominator)
    with working_bits(128):
        for time in (fmpq(0), fmpq(1, 8), fmpq(5, 2)):
            found = evaluate(model.response_modes(), time)
            assert float(found) == pytest.approx(expected(float(time.p) / float(time.q)), rel=1e-13, abs=1e-13)  # type: ignore[operator]
            assert found.rad() < arb("1e-25")


@pytest.mark.parametrize("family", ["butterworth", "bessel"])
def test_step_and_impulse_response_against_simulation(family: str) -> None:
    """scipy.signal.impulse and step of a fifth-order low-pass."""
    model = blocks(schema.Lowpass(family=family, order=5, corner_hz=exact("0.5")))
    with working_bits(128):
        system = scipy.signal.ZerosPolesGain([], root_floats(model.poles), float(model.gain.value()))
    times = np.linspace(0, 5, 11)
    _, kick = scipy.signal.impulse(system, T=times)
    _, step = scipy.signal.step(system, T=times)
    with working_bits(128):
        for integrations, expected in ((0, kick), (1, step)):
            found = [float(evaluate(model.response_modes(integrations), fmpq(k, 2))) for k in range(11)]
            assert found == pytest.approx(expected, abs=1e-8)


def test_ramp_response_of_a_model_with_zeros_at_the_origin() -> None:
    """s^2/((s+1)(s+2)) integrated twice is 1/((s+1)(s+2)): the zeros at the origin meet the integrations exactly."""
    model, plain = ratio([1, 0, 0], [1, 3, 2]), ratio([1], [1, 3, 2])
    with working_bits(128):
        found = model.response_modes(2)
        assert len(found) == 2
        for time in (fmpq(0), fmpq(2)):
            assert evaluate(found, time).overlaps(evaluate(plain.response_modes(), time))


@given(
    denominator=st.lists(small, min_size=1, max_size=5),
    numerator=st.lists(small, min_size=1, max_size=4),
    point=st.tuples(nonzero, nonzero),
)
@few
def test_value_at_a_point(denominator: list[fmpq], numerator: list[fmpq], point: tuple[fmpq, fmpq]) -> None:
    """H(s) from the factored form is numerator(s)/denominator(s), and gain at s = 0 is their ratio."""
    top, bottom = polynomial(numerator), polynomial([1, *denominator])
    if top == 0:
        return
    try:
        model = ratio(numerator, [1, *denominator])
    except Refused:
        return
    with working_bits(256):
        s = acb(*point)
        if whole_at(bottom, s).contains(0):
            return
        assert model.at(s).overlaps(whole_at(top, s) / whole_at(bottom, s))
        if bottom[0] != 0:
            gain = model.dc_gain_ball()
            assert gain is not None
            assert gain.overlaps(arb(top[0] / bottom[0]))
            if model.dc_gain is not None:
                assert model.dc_gain == top[0] / bottom[0]
