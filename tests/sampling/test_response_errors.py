"""Response errors where double precision gives out, and where the answer is known in closed form."""

from math import exp

import pytest
from flint import fmpq

from afterkick.design import schema
from afterkick.model.blocks import block_factors
from afterkick.model.factors import product
from afterkick.model.model import build
from afterkick.sampling import sample
from afterkick.sampling.response_errors import response_errors


@pytest.mark.parametrize("method", ["zero-order-hold", "first-order-hold"])
def test_a_mode_far_faster_than_the_rate_is_measured_in_balls(method: str) -> None:
    """An RC of 10 ns at 40 kHz: its image is e^-2500, and the partial fractions cancel in double precision."""
    blocks = (
        schema.RcHighpass(ohm=fmpq(22000), farad=fmpq(47, 10**9)),
        schema.RcLowpass(ohm=fmpq(1), farad=fmpq(1, 10**8)),
        schema.DeadTime(delay_s=fmpq(875, 10**7)),
    )
    model = build(product(block_factors(block) for block in blocks))
    found = response_errors(sample(model, schema.Sampling(rate_hz=fmpq(40000), method=method)))
    assert found.staircase_at_samples is not None
    assert found.staircase_between_samples is not None
    assert 0 <= found.staircase_at_samples <= found.staircase_between_samples


def test_staircase_difference_of_a_lag_in_closed_form() -> None:
    """Between the samples the held output of a lag is off by 2 (1 - e^-aT) at most: the largest step that an input
    within +-1 can make, and all of it settled but for this (derived here)."""
    model = build(block_factors(schema.Lag(time_constant_s=fmpq(1))))
    found = response_errors(sample(model, schema.Sampling(rate_hz=fmpq(20), method="zero-order-hold")))
    assert found.staircase_at_samples == 0.0
    assert found.staircase_between_samples == pytest.approx(2 * (1 - exp(-0.05)), rel=1e-6)
