"""What the structures' integers realise: the steps against the sections, and both against the exact filter."""

from fractions import Fraction

import pytest
from flint import acb, arb, fmpq

from afterkick.errors import Refused
from afterkick.fixed.linear import LinearSystem
from afterkick.fixed.realised import realised
from afterkick.numbers import working_bits
from fixed.structure_designs import (
    BUILD,
    CASES,
    STABLE,
    STABLE_CASES,
    WIDE,
    at,
    build,
    dc_gain,
    impulse_error,
    response_of_steps,
    transfer_of_sections,
)
from helpers import ratio, sampled

METHODS = ("zero-order-hold", "bilinear")


def built(structure, model, rate, method, **arithmetic):
    filtered = at(model, rate, method)
    return build(structure, filtered, **arithmetic), filtered


@pytest.mark.parametrize("method", METHODS)
@pytest.mark.parametrize(("structure", "model"), CASES)
def test_steps_realise_the_sections_exactly(structure, model, method):
    """The response of the program's steps is, as a rational function, that of the sections' b and a."""
    program, _ = built(structure, model, 20, method, coefficient_bits=20)
    steps, sections = response_of_steps(program), transfer_of_sections(program)
    assert steps.numerator == sections.numerator
    assert steps.denominator == sections.denominator


@pytest.mark.parametrize("method", METHODS)
@pytest.mark.parametrize(("structure", "model"), STABLE_CASES)
def test_realised_filter_is_that_of_the_steps(structure, model, method):
    """realised() finds the roots; its first samples are those of the steps, to the accuracy of the roots."""
    program, filtered = built(structure, model, 20, method)
    exact = response_of_steps(program).samples(40)
    with working_bits(1024):
        found = realised(program, filtered).first_samples(40)
        ratio = program.output_format.full_scale / program.input_format.full_scale
        assert all((value - other * ratio).contains(0) for value, other in zip(found, exact, strict=True))


# 16-bit coefficients, 20 samples a corner period: a last place is 3e-5 of a coefficient.
@pytest.mark.parametrize("method", METHODS)
@pytest.mark.parametrize(("structure", "model"), CASES)
def test_impulse_error_is_that_of_rounded_coefficients(structure, model, method):
    program, filtered = built(structure, model, 20, method)
    # the parts of 16 poles are some hundred times larger than their sum
    limit = {"transposed": 4e-3, "parallel": 5e-2 if model == "low-pass 16" else 1e-3}.get(structure, 1e-3)
    assert impulse_error(program, filtered, 160) < limit


@pytest.mark.parametrize(("structure", "model"), STABLE_CASES)
def test_wider_coefficients_lower_the_impulse_error(structure, model):
    errors = [impulse_error(*built(structure, model, 20, "bilinear", coefficient_bits=bits), 120) for bits in (12, 24)]
    assert errors[1] < errors[0] / 100


HIGH_RATE = {100: 100, 1000: 1000, 10_000: 2000, 100_000: 2000}


@pytest.mark.parametrize("method", METHODS)
@pytest.mark.parametrize("rate", HIGH_RATE)
@pytest.mark.parametrize("model", ["low-pass 1", "low-pass 2", "high-pass 2", "notch", "lead-lag"])
def test_delta_does_not_mind_the_rate(model, rate, method):
    filtered = at(model, rate, method)
    if rate >= 1000 and model == "low-pass 2":
        with pytest.raises(Refused, match=r"1 \+ a1 \+ a2|unit circle"):
            build("direct", filtered)
    program = build("delta", filtered)
    assert impulse_error(program, filtered, HIGH_RATE[rate]) < 1e-4


@pytest.mark.parametrize("rate", [20, 300, 10_000])
@pytest.mark.parametrize(
    "model", [name for name in STABLE if name not in ("low-pass 16", "resonator", "three equal lags")]
)
@pytest.mark.parametrize("structure", ["delta", "parallel"])
def test_rational_gain_at_zero_frequency_is_exact(structure, model, rate):
    exact = {"gain 10/3": Fraction(10, 3)} | dict.fromkeys(("high-pass 1", "high-pass 2", "band-pass 8"), Fraction(0))
    found = dc_gain(build(structure, at(model, rate)))
    if model == "elliptic 6":
        # of even order: at 0 Hz the ripple is at its bottom, 10^(-1/40)
        assert float(found) == pytest.approx(10 ** (-1 / 40), rel=5e-5)
    elif structure == "parallel" and model == "gain 10/3":
        assert float(found) == pytest.approx(10 / 3, rel=2e-5)
    else:
        assert found == exact.get(model, Fraction(1))


@pytest.mark.parametrize("model", ["low-pass 2", "low-pass 8", "band-stop 4"])
def test_coupled_gain_at_zero_frequency_is_near(model):
    for rate in (20, 300):
        assert float(dc_gain(build("coupled", at(model, rate)))) == pytest.approx(1, abs=2e-4)


@pytest.mark.parametrize("structure", ["transposed", "delta", "coupled"])
def test_zeros_at_both_ends_are_exact(structure):
    for rate in (20, 100):
        low = transfer_of_sections(build(structure, at("low-pass 8", rate, "bilinear"), coefficient_bits=24)).numerator
        assert low(fmpq(-1)) == 0
        assert low.derivative()(fmpq(-1)) == 0
        high = transfer_of_sections(
            build(structure, at("high-pass 2", rate, "bilinear"), coefficient_bits=24)
        ).numerator
        assert high(fmpq(1)) == 0
        assert high.derivative()(fmpq(1)) == 0
        band = transfer_of_sections(
            build(structure, at("band-pass 8", rate, "bilinear"), coefficient_bits=24)
        ).numerator
        assert band(fmpq(1)) == band(fmpq(-1)) == 0


@pytest.mark.parametrize("rate", [20, 1000, 20_000])
def test_delta_keeps_zeros_on_the_unit_circle(rate):
    for model in ("notch", "band-stop 4", "elliptic 6"):
        for section in build("delta", at(model, rate, "bilinear")).sections:
            assert section.b[0] == section.b[2]


@pytest.mark.parametrize("structure", ["delta", "parallel"])
@pytest.mark.parametrize("model", ["integrator", "integrator, lag", "pi"])
def test_integrators_integrate_exactly(structure, model):
    """A pole at exactly z = 1, and a state that adds its input up without any rounding."""
    program = build(structure, at(model, 1000))
    assert response_of_steps(program).denominator(fmpq(1)) == 0
    system = LinearSystem(program)
    for source in system.sources:
        to_output = system.responses(source.dest)[program.output]
        assert to_output.total is not None


@pytest.mark.parametrize("structure", WIDE)
def test_undamped_pairs(structure):
    oscillator = sampled(ratio([1], [1, 0, 40]), 100, "zero-order-hold")
    if structure == "coupled":
        with pytest.raises(Refused, match="pole pair on the unit circle"):
            build(structure, oscillator)
        return
    sections = build(structure, oscillator).sections
    assert any(section.a[0] == section.a[2] for section in sections)


@pytest.mark.parametrize("structure", BUILD)
def test_notch_stays_deep(structure):
    """At the zero of the exact filter: exactly on the circle or not, more than 60 dB below the pass band."""
    filtered = at("notch", 20, "bilinear")
    response = transfer_of_sections(build(structure, filtered))
    with working_bits(256):
        inverse = 1 / filtered.transfer().zeros[0].value

        def value(polynomial):
            return sum((acb(arb(c)) * inverse**i for i, c in enumerate(polynomial.coeffs())), acb(0))

        depth = abs(value(response.numerator) / value(response.denominator)) / abs(acb(arb(response.total)))
    assert depth < 1e-3
