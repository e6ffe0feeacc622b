"""The holds by another road: a state-space cascade, and one augmented matrix exponential in balls.

x' = A x + B u with u held or ramped between samples is autonomous in (x, u) or (x, u, slope), so
exp([[A, B], [0, 0]] T) has the transition matrix and the hold integrals in it (C. F. Van Loan, Computing integrals
involving the matrix exponential, IEEE Transactions on Automatic Control 23(3), 1978).
"""

from collections.abc import Sequence
from math import comb

import pytest
from attrs import frozen
from flint import arb, arb_mat, fmpq

from afterkick.design import schema
from afterkick.model.blocks import block_factors
from afterkick.model.factors import from_polynomials, product
from afterkick.model.model import Model, build
from afterkick.model.partial_fractions import evaluate
from afterkick.model.roots import RADIANS
from afterkick.numbers import working_bits
from afterkick.sampling import Sampled
from helpers import exact, overlap, polynomial, pulse, sampled

BITS = 2048
SAMPLES = 40

Part = tuple[tuple[str, ...], tuple[str, ...]]
"""Numerator and denominator of a section of order 1 or 2, highest power first, denominators monic."""

SYSTEMS: dict[str, list[Part]] = {
    "lag": [(("3",), ("1", "2"))],
    "integrator": [(("1.5",), ("1", "0"))],
    "double integrator": [(("1",), ("1", "0", "0"))],
    "integrator and lag": [(("1",), ("1", "0")), (("4",), ("1", "4"))],
    "double integrator with a lead": [(("2", "1"), ("1", "0", "0")), (("1", "0.5"), ("1", "9"))],
    "triple integrator": [(("1",), ("1", "0", "0")), (("1",), ("1", "0"))],
    "pole repeated five times": [(("1",), ("1", "4", "4"))] * 2 + [(("2", "1"), ("1", "2"))],
    "pair repeated": [(("5",), ("1", "2", "5"))] * 3,
    "undamped pair": [(("9",), ("1", "0", "9"))],
    "undamped pair and integrator": [(("1", "2"), ("1", "0", "9")), (("1",), ("1", "0"))],
    "feedthrough": [(("2", "1", "3"), ("1", "0.5", "7")), (("-1", "4"), ("1", "6"))],
    "differentiating feedthrough": [(("1", "0", "0"), ("1", "1.4", "1"))],
    "unstable": [(("1",), ("1", "-0.5")), (("1", "1"), ("1", "0.2", "3"))],
    "order 16": [
        (("1", "0.3", "4"), ("1", f"0.{k}", f"{k * k}.5")) if k % 2 else ((f"{k * k}",), ("1", f"1.{k}", f"{k * k}"))
        for k in range(1, 9)
    ],
    "stiff": [(("1",), ("1", "1000")), (("1",), ("1", "0.001")), (("2",), ("1", "1"))],
}
RATES = {"stiff": fmpq(100), "order 16": fmpq(40)}


@frozen
class StateSpace:
    a: list[list[fmpq]]
    b: list[fmpq]
    c: list[fmpq]
    d: fmpq


def of_part(part: Part) -> StateSpace:
    """Controller form of a section."""
    denominator = [exact(x) for x in part[1]]
    order = len(denominator) - 1
    numerator = [fmpq(0)] * (order + 1 - len(part[0])) + [exact(x) for x in part[0]]
    d = numerator[0]
    rest = [numerator[k] - d * denominator[k] for k in range(1, order + 1)]
    if order == 1:
        return StateSpace([[-denominator[1]]], [fmpq(1)], [rest[0]], d)
    a = [[fmpq(0), fmpq(1)], [-denominator[2], -denominator[1]]]
    return StateSpace(a, [fmpq(0), fmpq(1)], [rest[1], rest[0]], d)


def in_series(first: StateSpace, second: StateSpace) -> StateSpace:
    """The output of the first drives the second."""
    n, m = len(first.a), len(second.a)
    a = [row + [fmpq(0)] * m for row in first.a]
    a += [[second.b[i] * first.c[j] for j in range(n)] + second.a[i] for i in range(m)]
    b = first.b + [second.b[i] * first.d for i in range(m)]
    c = [second.d * first.c[j] for j in range(n)] + second.c
    return StateSpace(a, b, c, second.d * first.d)


def cascade(parts: Sequence[Part]) -> StateSpace:
    total = of_part(parts[0])
    for part in parts[1:]:
        total = in_series(total, of_part(part))
    return total


def model_of_parts(parts: Sequence[Part], dead_time_s: fmpq | None = None) -> Model:
    factors = [from_polynomials(polynomial(top), polynomial(bottom), RADIANS) for top, bottom in parts]
    if dead_time_s is not None:
        factors.append(block_factors(schema.DeadTime(delay_s=dead_time_s)))
    return build(product(factors))


def transition(system: StateSpace, time: fmpq, integrals: int) -> tuple[arb_mat, list[arb_mat]]:
    """e^(At), and the integrals G1 = int e^(As) B ds, G2 = int int ... of the augmented exponential."""
    n = len(system.a)
    size = n + integrals
    rows = [[arb(0)] * size for _ in range(size)]
    for i in range(n):
        for j in range(n):
            rows[i][j] = arb(system.a[i][j]) * arb(time)
        if integrals:
            rows[i][n] = arb(system.b[i]) * arb(time)
    if integrals == 2:
        rows[n][n + 1] = arb(1)
    exponential = arb_mat(rows).exp()
    phi = arb_mat([[exponential[i, j] for j in range(n)] for i in range(n)])
    return phi, [arb_mat([[exponential[i, n + k]] for i in range(n)]) for k in range(integrals)]


def output(system: StateSpace, state: arb_mat, direct: fmpq | int) -> arb:
    return sum((arb(c) * state[i, 0] for i, c in enumerate(system.c)), arb(0)) + arb(system.d) * direct


def held(system: StateSpace, period: fmpq, late: fmpq, number: int) -> list[arb]:
    """Pulse response under a zero-order hold, the input ``late`` (less than a period) behind: the hold is split."""
    phi, (whole,) = transition(system, period, 1)
    if late == 0:
        now, before = whole, arb_mat(len(system.a), 1)
    else:
        after_switch, (now,) = transition(system, period - late, 1)
        before = after_switch * transition(system, late, 1)[1][0]
    state = arb_mat(len(system.a), 1)
    values = []
    kick = [1] + [0] * number
    for n in range(number):
        previous = kick[n - 1] if n else 0
        values.append(output(system, state, previous if late != 0 else kick[n]))
        state = phi * state + now * arb(kick[n]) + before * arb(previous)
    return values


def ramped(system: StateSpace, period: fmpq, number: int) -> list[arb]:
    """Pulse response under the triangle: the ramp up to the pulse starts one sample before it."""
    phi, (whole, slope) = transition(system, period, 2)
    state = slope
    values = []
    for n in range(number):
        now = 1 if n == 0 else 0
        values.append(output(system, state, now))
        state = phi * state + (whole - slope) * arb(now)
    return values


def kicked(system: StateSpace, period: fmpq, number: int) -> list[arb]:
    """T c e^(AnT) b, half of it at n = 0, and the feedthrough there."""
    phi, _ = transition(system, period, 0)
    state = arb_mat([[arb(value)] for value in system.b])
    values = []
    for n in range(number):
        value = output(system, state, 0) * arb(period)
        values.append(value / 2 + arb(system.d) if n == 0 else value)
        state = phi * state
    return values


def from_modes(filtered: Sampled, number: int) -> list[arb]:
    """g[n] for n >= 1 from the closed form sum of c_j C(n-1, j) p^(n-1-j), no poles at z = 0."""
    modes = filtered.pulse_modes()
    values = []
    for n in range(1, number):
        total = arb(0)
        for mode in modes:
            inner = sum(
                (c * comb(n - 1, j) * mode.pole ** (n - 1 - j) for j, c in enumerate(mode.coefficients) if j < n),
                0 * mode.pole,
            )
            total += inner.real if mode.real else 2 * inner.real
        values.append(total)
    return values


@pytest.mark.parametrize("method", ["zero-order-hold", "first-order-hold", "impulse-invariant"])
@pytest.mark.parametrize("name", SYSTEMS)
def test_pulse_response(name: str, method: str) -> None:
    """Sections, series division and modal closed form of the sampled filter against the state space, 40 samples."""
    rate = RATES.get(name, fmpq(7))
    filtered = sampled(model_of_parts(SYSTEMS[name]), rate, method)
    sections = filtered.sections(600)
    with working_bits(BITS):
        system = cascade(SYSTEMS[name])
        expected = {
            "zero-order-hold": lambda: held(system, 1 / rate, fmpq(0), SAMPLES),
            "first-order-hold": lambda: ramped(system, 1 / rate, SAMPLES),
            "impulse-invariant": lambda: kicked(system, 1 / rate, SAMPLES),
        }[method]()
        assert overlap(filtered.first_samples(SAMPLES), expected, 1e-50)
        assert overlap(from_modes(filtered, SAMPLES), expected[1:], 1e-50)
    assert overlap(pulse(sections, SAMPLES), expected, 1e-50)


@pytest.mark.parametrize("name", [name for name in SYSTEMS if name != "order 16"])
@pytest.mark.parametrize("late", ["0.25", "1/3", "2.9"])
def test_split_hold(name: str, late: str) -> None:
    """A dead time of a fraction of a sample under a zero-order hold: the two parts of the hold integral."""
    rate = RATES.get(name, fmpq(7))
    delay = exact(late) / rate
    whole = int(exact(late).floor())
    filtered = sampled(model_of_parts(SYSTEMS[name], delay), rate, "zero-order-hold")
    assert filtered.delay_samples == whole
    with working_bits(BITS):
        expected = held(cascade(SYSTEMS[name]), 1 / rate, delay - whole / rate, SAMPLES)
        assert overlap(filtered.first_samples(SAMPLES), expected, 1e-50)
    assert overlap(pulse(filtered.sections(600), SAMPLES), expected, 1e-50)


def test_impulse_response_of_the_model() -> None:
    """The model's own closed form against c e^(At) b at times off the grid."""
    for name, parts in SYSTEMS.items():
        model = model_of_parts(parts)
        with working_bits(BITS):
            system = cascade(parts)
            for time in (fmpq(0), fmpq(1, 7), fmpq(3, 2)):
                phi, _ = transition(system, time, 0)
                expected = output(system, phi * arb_mat([[arb(value)] for value in system.b]), 0)
                found = evaluate(model.response_modes(), time)
                assert found.overlaps(expected), name
                assert found.rad() < arb("1e-100"), name
