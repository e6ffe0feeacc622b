"""L. B. Jackson, A correction to impulse invariance, IEEE Signal Processing Letters 7(10), 2000; W. F. G.
Mecklenbrauker, Signal Processing 80, 2000: the sample at a jump counts half."""

import pytest
from flint import acb, arb

from afterkick.numbers import working_bits
from helpers import exact, ratio, reference, sampled

EXAMPLE = reference("half_sample")["first_order_example"]
PERIOD_S = exact(EXAMPLE["sample_period_s"])
POLE = exact(EXAMPLE["a_rad_per_s"])


def response(frequency: object, first_sample: str) -> acb:
    filtered = sampled(ratio([POLE], [1, POLE]), 1 / PERIOD_S, "impulse-invariant", first_sample=first_sample)
    inverse_z = (acb(0, -1) * arb(exact(frequency) * PERIOD_S)).exp()  # type: ignore[arg-type]
    return filtered.transfer(200).at(inverse_z)


@pytest.mark.parametrize("index", range(len(EXAMPLE["frequency_rad_per_s"])))
def test_frequency_response(index: int) -> None:
    """H(s) = a/(s + a), a = 1, T = 0.5: recomputed values to 12 digits."""
    frequency = EXAMPLE["frequency_rad_per_s"][index]
    for rule, option in (("corrected", "half"), ("classic", "full")):
        value = complex(response(frequency, option))
        assert value.real == pytest.approx(float(EXAMPLE[f"{rule}_real"][index]), abs=6e-12)
        assert value.imag == pytest.approx(float(EXAMPLE[f"{rule}_imag"][index]), abs=6e-12)


@pytest.mark.parametrize("frequency", EXAMPLE["frequency_rad_per_s"], ids=str)
def test_corrected_response_is_the_sum_of_the_aliases(frequency: object) -> None:
    """sum over k of a/(a + j(w + 2 pi k/T)) = (aT/2) coth((a + jw)T/2), in balls."""
    with working_bits(300):
        x = acb(POLE, exact(frequency)) * arb(PERIOD_S) / 2  # type: ignore[arg-type]
        expected = arb(POLE * PERIOD_S) / 2 * x.coth()
        found = response(frequency, "half")
        assert found.overlaps(expected)
        assert found.rel_accuracy_bits() > 90
        assert not response(frequency, "full").overlaps(expected)
        excess = response(frequency, "full") - found
    assert float(excess.real) == pytest.approx(float(EXAMPLE["classic_minus_corrected"]), abs=1e-25)
    assert excess.imag.contains(0)


def test_sum_of_aliases_by_adding_them() -> None:
    """The same sum taken term by term: 2 * 4000 + 1 terms leave less than (a/T) / (2 pi^2 4000 / T^2)."""
    frequency = 1.0
    terms = 4000
    total = sum(1 / (1 + 1j * (frequency + 4 * 3.141592653589793 * k)) for k in range(-terms, terms + 1))
    assert complex(response(EXAMPLE["frequency_rad_per_s"][1], "half")) == pytest.approx(total, abs=1e-5)
