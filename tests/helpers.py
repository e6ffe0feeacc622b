"""What several test folders share: exact models from plain numbers, and filters run in ball arithmetic."""

import tomllib
from collections.abc import Sequence
from decimal import Decimal
from fractions import Fraction
from math import pi
from pathlib import Path
from typing import Any

import numpy as np
from flint import acb, arb, fmpq, fmpq_poly

from afterkick.design import schema
from afterkick.model.blocks import block_factors
from afterkick.model.factors import Gain, from_polynomials, product
from afterkick.model.forms import model_of
from afterkick.model.model import Model, build
from afterkick.model.roots import RADIANS, Roots, count, values
from afterkick.numbers import working_bits
from afterkick.sampling import Sampled, Section, sample

REFERENCE_DATA = Path(__file__).parent / "reference" / "data"

BITS = 512
"""Working precision of what is computed here from results of the package."""

Exact = int | str | Decimal | Fraction | fmpq


def exact(value: Exact) -> fmpq:
    """A rational from an integer, a decimal in text, a Decimal or a fraction; floats are not taken."""
    if isinstance(value, fmpq):
        return value
    assert not isinstance(value, float)
    number = Fraction(value)
    return fmpq(number.numerator, number.denominator)


def reference(name: str) -> dict[str, Any]:
    """The published figures of a file in tests/reference/data, decimals kept as they are written."""
    with (REFERENCE_DATA / f"{name}.toml").open("rb") as file:
        return tomllib.load(file, parse_float=Decimal)


def polynomial(highest_first: Sequence[Exact]) -> fmpq_poly:
    return fmpq_poly([exact(value) for value in reversed(highest_first)])


def ratio(numerator: Sequence[Exact], denominator: Sequence[Exact], unit: str = RADIANS) -> Model:
    """numerator / denominator, highest power first."""
    return build(from_polynomials(polynomial(numerator), polynomial(denominator), unit))


def blocks(*listed: schema.Block) -> Model:
    """The product of blocks of the design file."""
    return build(product(block_factors(block) for block in listed))


def model_from(form: schema.ModelForm) -> Model:
    """The model of a form, by the road a design file takes."""
    return model_of(schema.Design(schema.Identity("probe"), form, schema.Sampling(fmpq(1), "bilinear")))


def sampled(model: Model, rate_hz: Exact, method: str, **options: Any) -> Sampled:
    if "match_hz" in options:
        options["match_hz"] = exact(options["match_hz"])
    return sample(model, schema.Sampling(exact(rate_hz), method, **options))


@working_bits(BITS)
def run(sections: Sequence[Section], inputs: Sequence[arb | int | fmpq]) -> list[arb]:
    """The cascade's answer to ``inputs``, from rest, in balls."""
    signal = [arb(value) for value in inputs]
    for section in sections:
        answer: list[arb] = []
        for n, value in enumerate(signal):
            total = section.b[0] * value
            for k in (1, 2):
                if n >= k:
                    total += section.b[k] * signal[n - k] - section.a[k] * answer[n - k]
            answer.append(total)
        signal = answer
    return signal


def pulse(sections: Sequence[Section], number: int) -> list[arb]:
    """g[0] .. g[number - 1] of the cascade, in balls."""
    return run(sections, [1] + [0] * (number - 1))


@working_bits(BITS)
def multiplied(polynomials: Sequence[Sequence[arb]]) -> list[arb]:
    """The product of polynomials in 1/z, lowest power first."""
    total = [arb(1)]
    for factor in polynomials:
        longer = [arb(0)] * (len(total) + len(factor) - 1)
        for i, left in enumerate(total):
            for j, right in enumerate(factor):
                longer[i + j] += left * right
        total = longer
    return total


def level_db(value: complex | float | np.ndarray) -> Any:
    return 20 * np.log10(np.abs(value))


def analog_db(model: Model, frequencies_hz: Sequence[float]) -> np.ndarray:
    """20 log10 |H(j 2 pi f)|."""
    return np.array([level_db(complex(model.at(acb(0, 2 * pi * float(f))))) for f in frequencies_hz])


@working_bits(BITS)
def digital_db(filtered: Sampled, frequencies_hz: Sequence[float], bits: int = 80) -> np.ndarray:
    """The level of the cascade of sections, evaluated in balls: near z = 1 doubles would lose it."""
    sections = filtered.sections(bits)
    levels = []
    for frequency in frequencies_hz:
        angle = arb(2) * arb.pi() * arb(float(frequency)) / arb(filtered.rate_hz)
        inverse_z = acb(angle.cos(), -angle.sin())
        total = acb(1)
        for section in sections:
            top, bottom = (p[0] + inverse_z * (p[1] + inverse_z * p[2]) for p in (section.b, section.a))
            total *= top / bottom
        levels.append(level_db(complex(total)))
    return np.array(levels)


def section_floats(section: Section) -> tuple[np.ndarray, np.ndarray]:
    return np.array([float(x) for x in section.b]), np.array([float(x) for x in section.a])


def overlap(found: Sequence[arb], expected: Sequence[arb], relative: float = 1e-25) -> bool:
    """Whether the balls agree two by two, and say something: radii below ``relative`` of the largest expected one."""
    assert len(found) == len(expected)
    size = max(abs(float(value.mid())) for value in expected)
    return all(
        x.overlaps(y) and float(x.rad()) <= relative * size and float(y.rad()) <= relative * size
        for x, y in zip(found, expected, strict=True)
    )


def poles_and_zeros(model: Model) -> tuple[Roots, Roots, Gain]:
    return model.poles, model.zeros, model.gain


def root_floats(roots: Roots) -> np.ndarray:
    """Every root as often as it occurs, sorted."""
    found = [complex(value) for value, times in values(roots) for _ in range(times)]
    assert len(found) == count(roots)
    return np.array(sorted(found, key=lambda value: (value.real, value.imag)))
