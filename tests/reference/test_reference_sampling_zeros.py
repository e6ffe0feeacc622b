"""Astrom, Hagander and Sternby, Zeros of sampled systems, Automatica 20(1), 1984: chains of held integrators."""

from math import factorial

import pytest
from flint import arb

from afterkick.design import schema
from afterkick.numbers import working_bits
from helpers import blocks, multiplied, reference, sampled

DATA = reference("sampling_zeros")
ORDERS = sorted(int(name[1:]) for name in DATA["polynomial"])


@pytest.mark.parametrize("order", ORDERS)
def test_numerator_is_euler_frobenius(order: int) -> None:
    """n!/T^n times the numerator of the held 1/s^n has these integer coefficients."""
    filtered = sampled(blocks(*[schema.Integrator()] * order), 8, "zero-order-hold")
    numerator = multiplied([section.b for section in filtered.sections(120)])
    with working_bits(200):
        found = [value * factorial(order) * 8**order for value in numerator]
    first, *rest = found[: order + 1]
    assert first.is_zero()
    assert [int(value.unique_fmpz()) for value in rest] == DATA["polynomial"][f"n{order}"]


@pytest.mark.parametrize("order", ORDERS)
def test_zeros(order: int) -> None:
    """The printed zeros; from a pole excess of 3 on, one is outside the unit circle."""
    transfer = sampled(blocks(*[schema.Integrator()] * order), 8, "zero-order-hold").transfer()
    found = sorted(float(zero.value.real) for zero in transfer.zeros)
    assert all(zero.real for zero in transfer.zeros)
    assert found == pytest.approx([float(x) for x in DATA["zeros"][f"n{order}"]], abs=6e-9, rel=1e-9)
    assert (min(found) < -1) == (order >= 3)


@pytest.mark.parametrize("order", ORDERS)
def test_matched_puts_all_of_them_at_half_the_rate(order: int) -> None:
    """Matched: every zero at infinity to z = -1 (common practice)."""
    transfer = sampled(blocks(*[schema.Integrator()] * order), 8, "matched").transfer()
    assert [zero.value.real == arb(-1) for zero in transfer.zeros] == [True] * order
