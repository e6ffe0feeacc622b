"""The analog filter families against handbook figures, scipy.signal, mpmath and their defining equations in balls."""

import itertools
import math
from collections.abc import Iterator
from fractions import Fraction

import mpmath
import numpy as np
import pytest
import scipy.signal
from flint import acb, arb, fmpq, fmpq_poly
from hypothesis import given
from hypothesis import strategies as st
from scipy.optimize import linear_sum_assignment

from afterkick.errors import Refused
from afterkick.model.factors import Factors, from_polynomials, product
from afterkick.model.families import attenuation, bandpass, bandstop, highpass, lowpass, prototype
from afterkick.model.roots import HERTZ, ZERO, Root, algebraic_roots, count, refuse_undecided, values
from afterkick.numbers import accurate, mid_float, rational, working_bits

FAMILIES = ("butterworth", "bessel", "chebyshev", "inverse-chebyshev", "elliptic")
KINDS = ("lowpass", "highpass", "bandpass", "bandstop")
RIPPLE, STOP = rational("1.5"), fmpq(40)
LOW, HIGH = fmpq(2), fmpq(5)


@pytest.fixture(scope="module", autouse=True)
def precision() -> Iterator[None]:
    with working_bits(256):
        yield


def build(
    family: str, kind: str, order: int, ripple: fmpq = RIPPLE, stop: fmpq = STOP, low: fmpq = LOW, high: fmpq = HIGH
) -> Factors:
    """A filter of any kind; the one corner of a low-pass or high-pass is ``low``."""
    shape = prototype(family, order, ripple, stop)
    match kind:
        case "lowpass":
            return lowpass(shape, low)
        case "highpass":
            return highpass(shape, low)
        case "bandpass":
            return bandpass(shape, low, high)
        case _:
            return bandstop(shape, low, high)


def power(factors: Factors, hertz: arb | fmpq) -> arb:
    """|H(j 2 pi hertz)|^2."""
    s = acb(0, 2 * arb.pi() * arb(hertz))
    total = factors.gain.value() ** 2
    for roots, sign in ((factors.zeros, 1), (factors.poles, -1)):
        for value, times in values(roots):
            distance = s - value
            total *= (distance.real**2 + distance.imag**2) ** (sign * times)
    return total


def power_ratio(decibels: fmpq) -> arb:
    """10^(-decibels/10)."""
    return arb(10) ** (-arb(decibels) / 10)


def assert_ball(value: arb, expected: arb | fmpq | int, bits: int) -> None:
    """``value`` holds the expected number, and is not needlessly wide."""
    assert value.overlaps(arb(expected)), f"{value} is not {expected}"
    assert accurate(value, bits), f"{value} is known to {value.rel_accuracy_bits()} bits only"


def edge_powers(family: str, order: int, ripple: fmpq, stop: fmpq) -> arb:
    """|H|^2 at the corner of the prototype, by the convention of the family."""
    if family in ("butterworth", "bessel"):
        return arb(fmpq(1, 2))
    return power_ratio(stop if family == "inverse-chebyshev" else ripple)


# Handbook figures.  Half a unit of the last printed place is all that is allowed.

# Butterworth polynomials, factors s^2 + c s + 1 (Weinberg 1962; any filter handbook).  From memory, recomputed.
BUTTERWORTH = {
    2: ["1.4142"],
    3: ["1.0000"],
    4: ["0.7654", "1.8478"],
    5: ["0.6180", "1.6180"],
    6: ["0.5176", "1.4142", "1.9319"],
    7: ["0.4450", "1.2470", "1.8019"],
    8: ["0.3902", "1.1111", "1.6629", "1.9616"],
}
# Delay-normalized Bessel polynomials, highest power first (Storch 1954).  Confidence: stored text.
BESSEL_POLYNOMIALS = {
    2: [1, 3, 3],
    3: [1, 6, 15, 15],
    4: [1, 10, 45, 105, 105],
    5: [1, 15, 105, 420, 945, 945],
    6: [1, 21, 210, 1260, 4725, 10395, 10395],
}
# Delay-normalized Bessel poles in rad/s (Storch 1954).  Confidence: stored text.
BESSEL_DELAY_POLES = {
    2: [("-1.5", "0.8660254038")],
    3: [("-1.838907323", "1.75438096"), ("-2.322185355", "0.0")],
    4: [("-2.103789397", "2.657418042"), ("-2.896210603", "0.8672341289")],
    5: [("-2.324674303", "3.57102292"), ("-3.351956399", "1.742661416"), ("-3.646738595", "0.0")],
    6: [("-2.515932248", "4.492672954"), ("-3.735708356", "2.626272311"), ("-4.248359396", "0.8675096732")],
    7: [
        ("-2.685676879", "5.420694131"),
        ("-4.070139164", "3.517174048"),
        ("-4.758290528", "1.739286061"),
        ("-4.971786859", "0.0"),
    ],
    8: [
        ("-2.838983949", "6.353911299"),
        ("-4.368289217", "4.4144425"),
        ("-5.204840791", "2.616175153"),
        ("-5.587886043", "0.8676144454"),
    ],
}
# Bessel with -3 dB at 1 rad/s, factors 1 + a s + b s^2: a, b, Q (Carter and Mancini, Op Amps for Everyone, 5th edition,
# table 16.6).  Confidence: stored text.
BESSEL_CASCADE = {
    2: [("1.3617", "0.6180", "0.58")],
    3: [("0.7560", "0.0000", None), ("0.9996", "0.4772", "0.69")],
    4: [("1.3397", "0.4889", "0.52"), ("0.7743", "0.3890", "0.81")],
    5: [("0.6656", "0.0000", None), ("1.1402", "0.4128", "0.56"), ("0.6216", "0.3245", "0.92")],
    6: [("1.2217", "0.3887", "0.51"), ("0.9686", "0.3505", "0.61"), ("0.5131", "0.2756", "1.02")],
}
# Chebyshev factors s^2 + c1 s + c0 and s + r, ripple edge at 1 rad/s (Weinberg 1962).  From memory, recomputed.
CHEBYSHEV = {
    ("0.5", 2): (None, [("1.425625", "1.516203")]),
    ("0.5", 3): ("0.626456", [("0.626456", "1.142448")]),
    ("0.5", 4): (None, [("0.350706", "1.063519"), ("0.846680", "0.356412")]),
    ("0.5", 5): ("0.362320", [("0.223926", "1.035784"), ("0.586245", "0.476767")]),
    ("1", 2): (None, [("1.097734", "1.102510")]),
    ("1", 3): ("0.494171", [("0.494171", "0.994205")]),
    ("1", 4): (None, [("0.279072", "0.986505"), ("0.673739", "0.279398")]),
    ("1", 5): ("0.289493", [("0.178917", "0.988315"), ("0.468410", "0.429298")]),
    ("2", 2): (None, [("0.803816", "0.823060")]),
    ("2", 3): ("0.368911", [("0.368911", "0.886095")]),
    ("3", 2): (None, [("0.644900", "0.707948")]),
    ("3", 3): ("0.298620", [("0.298620", "0.839174")]),
}


def unit_poles(family: str, order: int, ripple: fmpq = RIPPLE) -> list[acb]:
    """The poles for a corner at 1 rad/s with imaginary part >= 0, that part falling."""
    found = [root.evaluate() / (2 * arb.pi()) for root in build(family, "lowpass", order, ripple, low=fmpq(1)).poles]
    return sorted(found, key=lambda pole: -mid_float(pole.imag))


def factor(pole: acb) -> tuple[arb, arb]:
    """c1 and c0 of s^2 + c1 s + c0."""
    return -2 * pole.real, pole.real**2 + pole.imag**2


def assert_printed(value: arb, printed: str) -> None:
    places = len(printed.partition(".")[2])
    assert abs(value - arb(rational(printed))) <= arb(fmpq(1, 2 * 10**places)), f"{value} is not printed as {printed}"


@pytest.mark.parametrize("order", BUTTERWORTH)
def test_butterworth_handbook(order: int) -> None:
    poles = unit_poles("butterworth", order)
    if order % 2:
        assert_ball(poles.pop().real, -1, 240)
    for pole, printed in zip(poles, BUTTERWORTH[order], strict=True):
        c1, c0 = factor(pole)
        assert_printed(c1, printed)
        assert c0.overlaps(arb(1))


@pytest.mark.parametrize("order", BESSEL_POLYNOMIALS)
def test_bessel_polynomial(order: int) -> None:
    """The product of the poles is scaled to the polynomial's constant, and then all coefficients are the integers."""
    polynomial = BESSEL_POLYNOMIALS[order]
    roots = values(build("bessel", "lowpass", order, low=fmpq(1)).poles)
    size = math.prod((abs(pole) for pole, _ in roots), start=arb(1))
    scale = (polynomial[-1] / size).root(order)
    found = [acb(1)]
    for pole, _ in roots:
        found = [a - b * pole * scale for a, b in zip([*found, acb(0)], [acb(0), *found], strict=True)]
    for value, integer in zip(found, polynomial, strict=True):
        assert value.real.contains(integer)
        assert value.real.rad() < arb(2) ** -200


@pytest.mark.parametrize("order", BESSEL_DELAY_POLES)
def test_bessel_delay_normalized_poles(order: int) -> None:
    constant = math.factorial(2 * order) // (2**order * math.factorial(order))
    poles = unit_poles("bessel", order)
    size = math.prod((abs(pole) ** (1 if pole.imag.is_zero() else 2) for pole in poles), start=arb(1))
    scale = (constant / size).root(order)
    for pole, (re, im) in zip(poles, BESSEL_DELAY_POLES[order], strict=True):
        assert_printed(pole.real * scale, re)
        assert_printed(pole.imag * scale, im)


@pytest.mark.parametrize("order", BESSEL_CASCADE)
def test_bessel_half_power_cascade(order: int) -> None:
    rows = reversed(BESSEL_CASCADE[order])
    for pole, (a, b, quality) in zip(unit_poles("bessel", order), rows, strict=True):
        if quality is None:
            assert_printed(-1 / pole.real, a)
            continue
        c1, c0 = factor(pole)
        assert_printed(c1 / c0, a)
        assert_printed(1 / c0, b)
        assert_printed(c0.sqrt() / c1, quality)


def test_bessel_scale_is_not_the_copied_one() -> None:
    """A much copied table is scaled by 1.75 at order 3 where 1.755672 is right: -1.3270, -1.0509 + 1.0025j there."""
    pair, real = unit_poles("bessel", 3)
    assert_printed(real.real, "-1.3227")
    assert_printed(pair.real, "-1.0474")
    assert_printed(pair.imag, "0.9993")


@pytest.mark.parametrize(("ripple", "order"), CHEBYSHEV)
def test_chebyshev_handbook(ripple: str, order: int) -> None:
    real, quadratics = CHEBYSHEV[ripple, order]
    poles = unit_poles("chebyshev", order, rational(ripple))
    if real is not None:
        assert_printed(-poles.pop().real, real)
    for pole, (c1, c0) in zip(poles, quadratics, strict=True):
        found_c1, found_c0 = factor(pole)
        assert_printed(found_c1, c1)
        assert_printed(found_c0, c0)


# scipy.signal


def by_scipy(family: str, kind: str, order: int) -> tuple[np.ndarray, np.ndarray, float]:
    edges = 2 * np.pi * np.array([float(LOW.p / LOW.q), float(HIGH.p / HIGH.q)] if "band" in kind else 2.0)
    ripple, stop = 1.5, 40.0
    call = {
        "butterworth": lambda **how: scipy.signal.butter(order, edges, kind, **how),
        "bessel": lambda **how: scipy.signal.bessel(order, edges, kind, norm="mag", **how),
        "chebyshev": lambda **how: scipy.signal.cheby1(order, ripple, edges, kind, **how),
        "inverse-chebyshev": lambda **how: scipy.signal.cheby2(order, stop, edges, kind, **how),
        "elliptic": lambda **how: scipy.signal.ellip(order, ripple, stop, edges, kind, **how),
    }
    return call[family](analog=True, output="zpk")


def distance(exact: Factors, roots: str, reference: np.ndarray) -> float:
    """The largest distance of the best pairing, relative to the largest pole."""
    listed = values(getattr(exact, roots))
    found = [complex(mid_float(v.real), mid_float(v.imag)) for v, times in listed for _ in range(times)]
    assert len(found) == len(reference)
    largest = max(mid_float(abs(value)) for value, _ in values(exact.poles))
    apart = np.abs(np.array(found)[:, None] - reference[None, :])
    return float(apart[linear_sum_assignment(apart)].max(initial=0.0) / largest)


@pytest.mark.parametrize("order", range(1, 9))
@pytest.mark.parametrize("kind", KINDS)
@pytest.mark.parametrize("family", FAMILIES)
def test_against_scipy(family: str, kind: str, order: int) -> None:
    """Within what doubles keep: scipy's Bessel and elliptic roots are iterated, the others are closed forms."""
    zeros, poles, gain = by_scipy(family, kind, order)
    exact = build(family, kind, order)
    assert distance(exact, "zeros", zeros) < 1e-12
    assert distance(exact, "poles", poles) < 1e-12
    assert mid_float(exact.gain.value()) == pytest.approx(gain, rel=1e-11)


# The defining equations, in balls


@pytest.mark.parametrize("bits", [128, 512])
@pytest.mark.parametrize("order", [1, 2, 3, 4, 7, 8, 16])
@pytest.mark.parametrize("kind", KINDS)
@pytest.mark.parametrize("family", FAMILIES)
def test_power_at_the_edges(family: str, kind: str, order: int, bits: int) -> None:
    factors = build(family, kind, order)
    with working_bits(bits):
        for hertz in (LOW, HIGH) if "band" in kind else (LOW,):
            assert_ball(power(factors, hertz), edge_powers(family, order, RIPPLE, STOP), bits - 28)


@pytest.mark.parametrize("order", [1, 2, 5, 8, 16])
@given(w=st.fractions(min_value="0.01", max_value=20, max_denominator=1000))
def test_butterworth_power(order: int, w: Fraction) -> None:
    x = fmpq(w.numerator, w.denominator)
    assert_ball(power(build("butterworth", "lowpass", order, low=fmpq(1)), x), 1 / (1 + x ** (2 * order)), 200)


@pytest.mark.parametrize("order", [1, 2, 5, 8, 16])
@given(w=st.fractions(min_value="0.01", max_value=20, max_denominator=1000))
def test_chebyshev_power(order: int, w: Fraction) -> None:
    x = arb(fmpq(w.numerator, w.denominator))
    square = 1 / power_ratio(RIPPLE) - 1
    expected = 1 / (1 + square * x.chebyshev_t(order) ** 2)
    assert_ball(power(build("chebyshev", "lowpass", order, low=fmpq(1)), x), expected, 200)
    square = 1 / power_ratio(STOP) - 1
    t = (1 / x).chebyshev_t(order) ** 2
    found = power(build("inverse-chebyshev", "lowpass", order, low=fmpq(1)), x)
    assert found.overlaps(t / (square + t))
    assert found.rad() < arb(2) ** -200  # absolute: a zero of the filter may be hit


@pytest.mark.parametrize("order", [2, 3, 8, 16])
def test_bessel_power(order: int) -> None:
    """|theta(0) / theta(j w c)|^2 with theta by its recurrence and the half-power c found by mpmath at 60 digits."""
    with mpmath.workdps(60):

        def theta(x: mpmath.mpf) -> mpmath.mpf:
            before, now = mpmath.mpf(1), x + 1
            for n in range(2, order + 1):
                before, now = now, (2 * n - 1) * now + x**2 * before
            return now

        start = mpmath.sqrt((2 * order - 1) * mpmath.log(2))  # the Gaussian limit
        corner = mpmath.findroot(lambda w: abs(theta(1j * w) / theta(0)) ** 2 - 2, start)
        expected = {w: abs(theta(0) / theta(1j * corner * w)) ** 2 for w in (mpmath.mpf("0.3"), 1, 2)}
    factors = build("bessel", "lowpass", order, low=fmpq(1))
    for w, reference in expected.items():
        found = power(factors, rational(mpmath.nstr(w, 5)))
        assert abs(found / arb(mpmath.nstr(reference, 55)) - 1) < arb(10) ** -50


def elliptic_modulus(order: int, ripple: fmpq, stop: fmpq) -> arb:
    """The modulus of the degree equation by the nome, at 150 digits of mpmath; the stop band starts at 1/modulus."""
    with mpmath.workdps(150):
        squares = [mpmath.mpf(10) ** (mpmath.mpf(int(db.p)) / int(db.q) / 10) - 1 for db in (ripple, stop)]
        nome = mpmath.qfrom(m=squares[0] / squares[1]) ** (mpmath.mpf(1) / order)
        return arb(mpmath.nstr(mpmath.kfrom(q=nome), 140))


@pytest.mark.parametrize(("ripple", "stop"), [("1.5", "40"), ("0.001", "120"), ("3", "3.5"), ("0.1", "60")])
@pytest.mark.parametrize("order", [2, 3, 4, 5, 8, 11, 16])
def test_elliptic_ripples(order: int, ripple: str, stop: str) -> None:
    """The pass band ends at the corner and the stop band starts at 1/k, at their levels; a zero mirrors a peak of 1."""
    rp, rs = rational(ripple), rational(stop)
    with working_bits(512):
        modulus = elliptic_modulus(order, rp, rs)
        factors = build("elliptic", "lowpass", order, rp, rs, low=fmpq(1))
        assert_ball(power(factors, fmpq(1)), power_ratio(rp), 400)
        assert abs(power(factors, 1 / modulus) / power_ratio(rs) - 1) < arb(10) ** -100
        assert_ball(power(factors, fmpq(0)), power_ratio(rp) if order % 2 == 0 else 1, 400)
        for zero in factors.zeros:
            hertz = zero.evaluate().imag / (2 * arb.pi())
            assert hertz > 1 / modulus
            assert abs(power(factors, 1 / (modulus * hertz)) - 1) < arb(10) ** -100
        if order % 2 == 0:
            assert_ball(factors.gain.value() ** 2, power_ratio(rs), 400)


@pytest.mark.parametrize("order", [1, 2, 5, 8, 16])
@pytest.mark.parametrize("kind", KINDS)
@pytest.mark.parametrize("family", FAMILIES)
def test_shape_of_every_filter(family: str, kind: str, order: int) -> None:
    """Numbers of roots, the sides they are on, exact zero parts, and the gains that are exact."""
    factors = build(family, kind, order)
    assert factors.order == order * (2 if "band" in kind else 1)
    for root in [*factors.zeros, *factors.poles]:
        value = root.evaluate()
        assert value.imag.is_zero() if root.real else value.imag > 0
    assert all(root.evaluate().real < 0 for root in factors.poles)
    assert all(root.evaluate().real.is_zero() for root in factors.zeros)
    assert all(times == 1 for times in factors.poles.values())
    finite = order // 2 * 2 if family in ("inverse-chebyshev", "elliptic") else 0
    expected = {"lowpass": finite, "highpass": order, "bandpass": order + finite, "bandstop": 2 * order}[kind]
    assert count(factors.zeros) == expected
    at_origin = {"lowpass": 0, "bandstop": 0}.get(kind, order - finite)
    assert factors.zeros.get(ZERO, 0) == at_origin
    if kind in ("lowpass", "bandstop"):
        rippled = family in ("chebyshev", "elliptic") and order % 2 == 0
        assert factors.dc_gain == (None if rippled else 1)
    else:
        assert factors.dc_gain == (None if at_origin else fmpq(1, 100))  # 40 dB
    if factors.dc_gain is not None:
        assert_ball(power(factors, fmpq(0)), factors.dc_gain**2, 200)


def test_attenuation_is_exact_where_it_is_rational() -> None:
    assert attenuation(fmpq(40)).rational == fmpq(1, 100)
    assert not attenuation(fmpq(40)).others
    assert_ball(attenuation(fmpq(10)).value() ** 2, fmpq(1, 10), 240)


def test_a_missing_parameter_is_named() -> None:
    with pytest.raises(Refused, match="ripple_db"):
        prototype("chebyshev", 2)
    with pytest.raises(Refused, match="stop_db"):
        prototype("elliptic", 2, fmpq(1))


# Precision


@pytest.mark.parametrize("kind", KINDS)
@pytest.mark.parametrize("family", FAMILIES)
def test_radius_shrinks_with_the_precision(family: str, kind: str) -> None:
    factors = build(family, kind, 8)
    found: dict[int, list[acb]] = {}
    for bits in (128, 256, 512, 1024):
        with working_bits(bits):
            found[bits] = [root.evaluate() for root in [*factors.zeros, *factors.poles]]
            assert all(accurate(part, bits - 32) for value in found[bits] for part in (value.real, value.imag))
            assert accurate(factors.gain.value(), bits - 16)
    for coarse, fine in itertools.combinations(found.values(), 2):
        assert all(one.overlaps(other) for one, other in zip(coarse, fine, strict=True))
    assert all(accurate(value, 400) for value in found[512])


@pytest.mark.parametrize(
    "extreme",
    [
        {"low": rational("1e-6"), "high": rational("1e9")},
        {"low": fmpq(10**9), "high": fmpq(2 * 10**9)},
        {"low": rational("1e-6"), "high": rational("3e-6")},
        {"low": rational("99.995"), "high": rational("100.005")},
        {"ripple": rational("0.001"), "stop": fmpq(120)},
        {"ripple": rational("0.001"), "stop": fmpq(400)},
        {"ripple": fmpq(20), "stop": rational("20.001")},
    ],
    ids=str,
)
@pytest.mark.parametrize("kind", KINDS)
@pytest.mark.parametrize("family", FAMILIES)
def test_extreme_parameters(family: str, kind: str, extreme: dict[str, fmpq]) -> None:
    chosen = {"low": LOW, "high": HIGH, "ripple": RIPPLE, "stop": STOP, **extreme}
    factors = build(family, kind, 7, **chosen)
    with working_bits(512):
        assert all(root.evaluate().real < 0 for root in factors.poles)
        refuse_undecided({**factors.zeros, **factors.poles})
        edge = edge_powers(family, 7, chosen["ripple"], chosen["stop"])
        for hertz in (chosen["low"], chosen["high"]) if "band" in kind else (chosen["low"],):
            assert_ball(power(factors, hertz), edge, 300)


# Keys: equal exactly when the numbers are


def lag(corner: fmpq) -> Root:
    (root,) = algebraic_roots(fmpq_poly([corner, 1]), HERTZ)
    return root


@pytest.mark.parametrize("order", [1, 3, 5, 7, 15])
def test_odd_butterworth_contains_the_lag(order: int) -> None:
    for kind in ("lowpass", "highpass"):
        assert build("butterworth", kind, order, low=rational("7.25")).poles[lag(rational("7.25"))] == 1


def test_order_one_is_a_lag_in_every_family() -> None:
    assert list(build("bessel", "lowpass", 1).poles) == [lag(LOW)]
    # 10 dB at the corner: |H|^2 = 1 / (1 + 9 w^2).
    assert list(build("chebyshev", "lowpass", 1, ripple=fmpq(10)).poles) == [lag(LOW / 3)]
    assert list(build("inverse-chebyshev", "highpass", 1, stop=fmpq(10)).poles) == [lag(LOW * 3)]
    three = rational("2.7")
    same = [
        build("chebyshev", "lowpass", 1, ripple=three),
        build("inverse-chebyshev", "lowpass", 1, stop=three),
        build("elliptic", "lowpass", 1, ripple=three),
    ]
    assert len({root for factors in same for root in factors.poles}) == 1


def test_low_and_high_pass_butterworth_share_their_poles() -> None:
    for order in (1, 2, 8):
        both = product([build("butterworth", kind, order) for kind in ("lowpass", "highpass")])
        assert set(both.poles.values()) == {2}


def test_first_order_band_filters_are_resonator_and_notch() -> None:
    """Center 6 Hz, bandwidth 5 Hz: the band from 4 to 9 Hz."""
    denominator = fmpq_poly([36, 5, 1])
    for kind, numerator in (("bandpass", fmpq_poly([0, 5])), ("bandstop", fmpq_poly([36, 0, 1]))):
        found = build("butterworth", kind, 1, low=fmpq(4), high=fmpq(9))
        assert found == from_polynomials(numerator, denominator, HERTZ)


@pytest.mark.parametrize("family", FAMILIES)
@pytest.mark.parametrize("kind", KINDS)
def test_a_filter_squared_has_double_roots(family: str, kind: str) -> None:
    once, again = build(family, kind, 4), build(family, kind, 4)
    assert product([once, again]).poles == dict.fromkeys(once.poles, 2)
    assert product([once, again]).zeros == {root: 2 * times for root, times in once.zeros.items()}


def test_keys_differ_exactly_where_the_numbers_do() -> None:
    roots: dict[Root, acb] = {}
    for family, kind, order in itertools.product(FAMILIES, KINDS, (1, 2, 3, 6, 9)):
        for ripple, stop in ((RIPPLE, STOP), (fmpq(1), fmpq(50))):
            for low in (LOW, fmpq(3)):
                factors = build(family, kind, order, ripple, stop, low)
                for root in [*factors.zeros, *factors.poles]:
                    value = root.evaluate()
                    assert roots.setdefault(root, value).overlaps(value)
    # Sorting brings equal numbers together.
    ordered = sorted(roots.values(), key=lambda value: (mid_float(value.imag), mid_float(value.real)))
    assert len(ordered) > 1000
    assert not any(one.overlaps(other) for one, other in itertools.pairwise(ordered))


def test_zeros_of_the_inverse_chebyshev_filter_are_algebraic() -> None:
    """At order 3 the zero is 2/sqrt(3) times the corner."""
    (zero,) = build("inverse-chebyshev", "lowpass", 3).zeros
    assert zero in algebraic_roots(fmpq_poly([4 * LOW**2, 0, 3]), HERTZ)


@pytest.mark.parametrize("family", ["chebyshev", "inverse-chebyshev", "elliptic"])
def test_double_real_pole_of_a_band_stop(family: str) -> None:
    """20 dB at 9 and 11 Hz by one pole: e^2 = 99, and (x^2 + 99)^2 = 4 * 99 x^2 has double roots at sqrt(99)."""
    factors = build(
        family, "bandstop", 1, fmpq(20), fmpq(20 if family == "inverse-chebyshev" else 30), fmpq(9), fmpq(11)
    )
    ((root, times),) = factors.poles.items()
    assert (root.real, times) == (True, 2)
    assert root in algebraic_roots(fmpq_poly([-99, 0, 1]), HERTZ)
    assert_ball(root.evaluate().real, -2 * arb.pi() * arb(99).sqrt(), 240)
    assert_ball(power(factors, fmpq(9)), fmpq(1, 100), 240)


@pytest.mark.parametrize(("low", "pairs"), [("5", 1), ("0.1", 0)])
@pytest.mark.parametrize("family", FAMILIES)
def test_the_real_pole_of_a_band_filter(family: str, low: str, pairs: int) -> None:
    """A narrow band makes a pair of it, a wide band two real poles."""
    for kind in ("bandpass", "bandstop"):
        factors = build(family, kind, 3, low=rational(low), high=fmpq(7))
        real = [root for root in factors.poles if root.real]
        assert len(real) == 2 - 2 * pairs
        assert factors.order == 6
