"""A part of the accuracy table of figures/butterworth_grid.py: sections against mpmath at 60 digits and more."""

import pytest

from figures.butterworth_grid import LIMIT, METHODS, judged


@pytest.mark.parametrize("method", METHODS)
@pytest.mark.parametrize(("order", "samples_per_period"), [(2, 100_000), (6, 10), (8, 1_000), (8, 100_000)])
def test_error_of_the_sections(order: int, samples_per_period: int, method: str) -> None:
    row = judged(order, samples_per_period, method, library=False)
    assert 0 < row.certified <= LIMIT
    assert 0 < row.true <= LIMIT
    assert row.first <= LIMIT


def test_doubles_are_told_unstable() -> None:
    """Order 8 at 1,000 samples a period, polynomials in doubles: the comparison column is not decoration."""
    assert judged(8, 1_000, "zero-order-hold").library.startswith("unstable")
