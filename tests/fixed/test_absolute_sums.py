"""Absolute sums and energies of pulse responses: closed forms, brute force, and limits that must not be too wide.

Source of the closed forms: A. V. Oppenheim and R. W. Schafer, Discrete-Time Signal Processing, sections 6.9 and 6.10
(noise gain of a second-order section), and the geometric series; the figures below were derived from them and checked
against direct summation (confidence: derived).
"""

import math

import mpmath
import pytest
from flint import acb, arb, fmpq, fmpq_poly

from afterkick.fixed.linear import RationalResponse
from afterkick.fixed.modal_sums import ModalResponse, _Blocks, absolute_sum, difference, modal_response, values
from afterkick.model.partial_fractions import Mode
from afterkick.numbers import working_bits

# sum |h| of 1 / (1 - 2 r cos(pi/N)/z + r^2/z^2), r = 0.95
ALL_POLE_SUMS = {2: 10.256410256410254, 3: 13.672217353198938, 4: 17.49925743726912, 6: 25.480426379755084}

# sum h^2 of 1 / (1 - 2 r cos(theta)/z + r^2/z^2)
NOISE_GAINS = [
    (0.9, 0.7853981633974483, 5.752258794440968),
    (0.95, 0.39269908169872414, 36.257152880989416),
    (0.99, 0.19634954084936207, 665.0910688266),
]


def exact(value: float) -> fmpq:
    return fmpq(*value.as_integer_ratio())


def response(numerator: list, denominator: list) -> RationalResponse:
    return RationalResponse(fmpq_poly([fmpq(v) for v in numerator]), fmpq_poly([fmpq(v) for v in denominator]))


def all_pole(r: float, theta: float) -> RationalResponse:
    return response([1], [1, exact(-2 * r * math.cos(theta)), exact(r * r)])


def brute_force(found: RationalResponse, terms: int) -> mpmath.mpf:
    """The same sum by recursion in 60-digit arithmetic, up to a geometric rest."""
    with mpmath.workdps(60):
        top, bottom = (
            [mpmath.mpf(int(c.p)) / int(c.q) for c in polynomial.coeffs()]
            for polynomial in (found.numerator, found.denominator)
        )
        past: list[mpmath.mpf] = []
        total = mpmath.mpf(0)
        for n in range(terms):
            value = top[n] if n < len(top) else mpmath.mpf(0)
            value -= sum(bottom[j] * past[-j] for j in range(1, min(n, len(bottom) - 1) + 1))
            past.append(value)
            total += abs(value)
        return total


@pytest.mark.parametrize(("divisor", "expected"), ALL_POLE_SUMS.items())
def test_all_pole_sums_equal_the_closed_form(divisor: int, expected: float) -> None:
    found = absolute_sum(modal_response(all_pole(0.95, math.pi / divisor)))
    assert found.lower <= expected * (1 + 1e-14)
    assert found.upper >= expected * (1 - 1e-14)
    assert found.upper - found.lower < 1e-6 * expected


@pytest.mark.parametrize("pole", ["1/2", "-3/4", "999/1000", "-99999/100000"])
def test_first_order_sum_is_the_geometric_series(pole: str) -> None:
    top, bottom = map(int, pole.split("/"))
    found = absolute_sum(modal_response(response([1], [1, fmpq(-top, bottom)])))
    expected = 1 / (1 - abs(fmpq(top, bottom)))
    assert exact(found.lower) <= expected <= exact(found.upper)
    assert found.upper < float(int(expected.p) / int(expected.q)) * (1 + 1e-6)


@pytest.mark.parametrize(("r", "theta", "expected"), NOISE_GAINS)
def test_energy_equals_the_published_noise_gain(r: float, theta: float, expected: float) -> None:
    assert absolute_sum(modal_response(all_pole(r, theta))).squares == pytest.approx(expected, rel=1e-9)


@pytest.mark.parametrize(
    ("numerator", "denominator", "terms"),
    [
        ([1, 2, 1], [1, fmpq(-19, 10), fmpq(91, 100)], 800),
        ([0, 0, 3, -1], [1, fmpq(-1, 2)], 200),
        ([1], [1, fmpq(-27, 10), fmpq(243, 100), fmpq(-729, 1000)], 1500),  # a triple pole at 0.9
        ([1, -1], [1, 0, fmpq(81, 100)], 500),
        ([5], [1], 3),
        ([1, 0, 0, 0, 0, 0, 0, 7], [1, fmpq(1, 3)], 200),
    ],
)
def test_sums_agree_with_brute_force_within_their_limits(numerator: list, denominator: list, terms: int) -> None:
    found = response(numerator, denominator)
    limits = absolute_sum(modal_response(found))
    total = brute_force(found, terms)
    assert limits.lower <= total <= limits.upper
    assert limits.upper - limits.lower <= 1e-6 * float(total)


def test_a_pole_on_the_circle_has_no_bound() -> None:
    assert absolute_sum(modal_response(response([1], [1, -1]))).upper == math.inf
    assert absolute_sum(modal_response(response([1], [1, 0, 1]))).upper == math.inf


def test_a_difference_of_neighbours_keeps_its_small_sum() -> None:
    one = response([1], [1, fmpq(-99, 100)])
    other = response([1], [1, fmpq(-990001, 1000000)])
    limits = absolute_sum(difference(modal_response(one), modal_response(other)))
    expected = fmpq(1) / (1 - fmpq(990001, 1000000)) - 100
    assert exact(limits.lower) <= expected <= exact(limits.upper)
    assert limits.upper - limits.lower < 1e-6 * 0.01


def test_values_are_the_response() -> None:
    found = response([1, fmpq(1, 2)], [1, fmpq(-19, 10), fmpq(91, 100)])
    samples = [int(v.p) / int(v.q) for v in found.samples(60)]
    assert values(modal_response(found), 60).tolist() == pytest.approx(samples, rel=1e-12, abs=1e-14)


def test_a_late_block_is_within_its_slack() -> None:
    """A million samples on, the powers of the pole still come from balls: nothing has accumulated."""
    found = modal_response(response([1], [1, fmpq(-999999, 1000000)]))
    start = 1 << 20
    block, slack = _Blocks(found.modes).at(start)
    with mpmath.workdps(60):
        pole = mpmath.mpf(999999) / 1000000
        error = sum(abs(mpmath.mpf(float(value)) - pole ** (start + k)) for k, value in enumerate(block))
    assert error <= slack <= 1e-13 * float(block.sum())


@pytest.mark.parametrize("slower_first", [False, True])
def test_poles_that_doubles_can_not_tell_apart(slower_first: bool) -> None:
    """p^k - (1 - 10^-9) q^k changes its sign late, as q is slower than p by 10^-18; its sum is far from the closed form
    of a response that keeps its sign."""
    with working_bits(256):
        one = Mode(acb(arb(1 - fmpq(1, 10**9))), True, (acb(1),))
        slower = one.pole + arb(fmpq(1, 10**18))
        other = Mode(slower, True, (acb(-(1 - fmpq(1, 10**9))),))
        modes = (other, one) if slower_first else (one, other)
        early = sum(
            float(abs(one.pole.real**k - (1 - fmpq(1, 10**9)) * slower.real**k).mid()) for k in range(0, 10**5, 1000)
        )
    assert absolute_sum(ModalResponse((arb(0),), modes)).upper > 999 * early
