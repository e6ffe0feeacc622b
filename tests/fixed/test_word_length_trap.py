"""A slow low-pass in 16-bit data: the naive direct form fails, ours does not; the whole table is tests/figures'.

The naive integers are the sampled coefficients rounded to 14 fraction bits, common practice for 16-bit coefficients;
their gain is recomputed here from the integers themselves.
"""

import pytest

from afterkick.design.schema import Arithmetic
from afterkick.errors import Refused
from figures import word_length_trap as figure


@pytest.mark.parametrize(("ratio", "gain"), [(100, 1.0), (500, 1.5), (1000, 0.0), (10_000, 0.0)])
def test_the_naive_direct_form_loses_its_gain_and_then_falls_silent(ratio: int, gain: float) -> None:
    b, a = figure.naive_integers(figure.low_pass(ratio, "bilinear"))
    assert figure.naive_dc_gain(b, a) == gain
    assert any(b) is (gain != 0)


@pytest.mark.parametrize("ratio", [20, 500, 1000])
def test_narrow_coefficients_in_the_delta_structure_leave_nothing(ratio: int) -> None:
    arithmetic = Arithmetic(coefficient_bits=16, structure="delta")
    row = figure.judged("delta", arithmetic, figure.low_pass(ratio, "bilinear"), ratio)
    assert row.lacking == []
    assert row.gain_exact
    assert (row.rest_bound, row.left, row.settled_bound, row.settled) == (0, 0, 0, 0)
    assert row.impulse_error < 1e-4
    assert figure.cheapest([row]) == f"delta ({row.operations} operations, 0 left at most)"


def test_the_direct_form_needs_wide_coefficients_and_error_feedback() -> None:
    ratio = 500
    filtered = figure.low_pass(ratio, "bilinear")
    with pytest.raises(Refused, match="significant bits"):
        figure.judged("narrow", Arithmetic(coefficient_bits=16), filtered, ratio)
    plain = figure.judged("plain", Arithmetic(coefficient_bits=32), filtered, ratio)
    assert plain.lacking == [f"up to {plain.rest_bound} counts left"]
    assert 3000 < plain.left <= plain.rest_bound
    fed_back = figure.judged("fed back", Arithmetic(coefficient_bits=32, carry=2), filtered, ratio)
    assert fed_back.lacking == []
    assert fed_back.left <= fed_back.rest_bound == 1
    assert figure.cheapest([plain]) == ""
    assert figure.cheapest([plain, fed_back]).startswith("fed back (")
