"""IEC 61000-4-7:2002+A1:2008: smoothing of harmonic values, y[n] = (x[n] + beta y[n-1]) / alpha."""

from typing import Any

import pytest

from afterkick.design import schema
from helpers import blocks, exact, reference, sampled

DATA = reference("iec61000_4_7")


@pytest.mark.parametrize("row", DATA["row"], ids=lambda row: f"{row['mains_frequency_hz']}Hz-{row['cycles_in_window']}")
def test_printed_coefficients_are_the_held_lag(row: dict[str, Any]) -> None:
    """Table of coefficients (from memory): four digits of the step-invariant lag of 1.5 s, alpha good to 1.5e-4."""
    lag = blocks(schema.Lag(time_constant_s=exact(DATA["filter"]["time_constant_s"])))
    rate = exact(row["mains_frequency_hz"]) / row["cycles_in_window"]
    assert float(1 / rate) == pytest.approx(float(row["sample_period_s"]), rel=1e-15)
    (section,) = sampled(lag, rate, "zero-order-hold").sections(80)
    # A held input acts one sample later: the standard's x[n] is the mean of the window that ends at n.
    assert section.b[0].is_zero()
    alpha, beta = 1 / float(section.b[1]), -float(section.a[1]) / float(section.b[1])
    assert alpha == pytest.approx(float(row["alpha"]), rel=1.5e-4)
    assert beta == pytest.approx(float(row["beta"]), rel=1.8e-4)
    assert beta / alpha == pytest.approx(float(row["beta"] / row["alpha"]), abs=3e-5)
