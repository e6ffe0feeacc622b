"""Filters for tests of the integer stages: sections from plain numbers, and random designs from a seed."""

import random
from collections.abc import Sequence
from math import cos, pi

from attrs import frozen
from flint import arb, fmpq

from afterkick.design.schema import Arithmetic, Signal, Signals
from afterkick.errors import Refused
from afterkick.fixed import Program, direct_program
from afterkick.sampling import Sampled, Section
from afterkick.sampling.rational_cascade import rational_cascade

Numbers = Sequence[float | int | fmpq]


def exact(value: float | int | fmpq) -> fmpq:
    if isinstance(value, float):
        return fmpq(*value.as_integer_ratio())
    return fmpq(value)


@frozen
class PlainModel:
    """As much of a model."""

    dc_gain: fmpq | None = None


@frozen(eq=False)
class PlainSampled:
    """As much of a sampled filter as the integer stages read, from exact coefficients."""

    coefficients: tuple[tuple[Numbers, Numbers], ...]
    """b and a[1:] of each section, filled up with zeros."""
    delay_samples: int = 0
    marginal: bool = False
    rate_hz: fmpq = fmpq(1000)
    method: str = "zero-order-hold"
    model: PlainModel = PlainModel()

    def pulse(self, indices: Sequence[int]) -> list[arb]:
        cascade = [([exact(x) for x in b], [fmpq(1), *(exact(x) for x in a)]) for b, a in self.coefficients]
        return Sampled(None, None, 0, fmpq(0), lambda: rational_cascade(cascade, fmpq(1))).pulse(indices)

    def sections(self, bits: int) -> tuple[Section, ...]:
        return tuple(
            Section(
                tuple(arb(exact(x)) for x in [*b, 0, 0][:3]),
                (arb(1), *(arb(exact(x)) for x in [*a, 0, 0][:2])),
            )
            for b, a in self.coefficients
        )


def program_of(
    *coefficients: tuple[Numbers, Numbers],
    delay: int = 0,
    marginal: bool = False,
    name: str = "probe",
    signals: Signals | None = None,
    title: str = "",
    search: bool = False,
    **arithmetic: object,
) -> Program:
    """The direct program of sections given as (b, a[1:])."""
    sampled = PlainSampled(tuple(coefficients), delay, marginal)
    return direct_program(sampled, Arithmetic(**arithmetic), signals or Signals(), name, title=title, search=search)


def _poles(draw: random.Random, order: int, closest: float) -> list[float]:
    """a[1:] of a stable section whose poles come as near as ``closest`` to the unit circle."""
    radius = 1 - closest * 10 ** draw.uniform(0, 1.3)
    if order == 1:
        return [-draw.choice((1, 1, -1)) * radius]
    if draw.random() < 0.3:
        other = draw.uniform(-0.9, 0.9)
        return [-(radius + other), radius * other]
    return [-2 * radius * cos(draw.uniform(0.15, pi - 0.15)), radius * radius]


def _zeros(draw: random.Random, order: int) -> list[float]:
    gain = draw.choice((1, -1)) * 10 ** draw.uniform(-2, 0.5)
    if order == 1:
        shape = draw.choice(([1, 1], [1, -1], [1, 0], [0, 1], [1, draw.uniform(-1, 1)]))
    else:
        angle = cos(draw.uniform(0, pi))
        shape = draw.choice(
            (
                [1, 2, 1],
                [1, -2, 1],
                [1, 0, -1],
                [0, 1, draw.uniform(-1, 1)],
                [0, 0, 1],
                [1, -2 * angle, 1],
                [1, draw.uniform(-2, 2), draw.uniform(-1, 1)],
            )
        )
    return [gain * x for x in shape]


def _attempt(draw: random.Random, name: str, search: bool) -> Program:
    order = draw.randint(1, 8)
    coefficient_bits = draw.randint(8, 32)
    closest = max(2.0 ** (9 - coefficient_bits), 1e-4)
    orders = [2] * (order // 2) + [1] * (order % 2)
    sampled = PlainSampled(
        tuple((_zeros(draw, n), _poles(draw, n, min(closest, 0.05))) for n in orders),
        draw.choice((0, 0, 0, 1, 2, 7)),
    )
    full_scales = [fmpq(draw.choice((1, 3, 10, 16)), draw.choice((1, 4, 7))) for _ in range(2)]
    signals = Signals(
        Signal("V", full_scales[0], full_scales[0] * draw.choice((1, fmpq(1, 2)))), Signal("A", full_scales[1])
    )
    arithmetic = Arithmetic(
        data_bits=draw.randint(8, 32),
        coefficient_bits=coefficient_bits,
        rounding=draw.choice(("nearest", "floor", "even")),
        overflow=draw.choice(("saturate", "wrap")),
        accumulator_bits=draw.choice((None, None, None, 64, 32)),
        scaling=draw.choice(("peak-gain", "two-norm", "infinity", "none")),
    )
    return direct_program(
        sampled, arithmetic, signals, name, title=f"random design {name}", digest="0123abcd", search=search
    )


def random_program(seed: int, name: str | None = None, search: bool = False) -> Program:
    """The first design of this seed that is not refused."""
    draw = random.Random(seed)
    while True:
        try:
            return _attempt(draw, name or f"design{seed}", search)
        except Refused:
            continue


def random_codes(program: Program, seed: int, length: int = 120) -> list[int]:
    """Full-scale noise, steps to both ends, impulses, full-scale squares of several periods, and small noise."""
    draw = random.Random(seed)
    word = program.word(program.input)
    low, high = word.lowest, word.highest
    codes = [draw.randint(low, high) for _ in range(length)]
    codes += [high] * length + [low] * length
    codes += [high] + [0] * (length // 2) + [low] + [0] * (length // 2)
    for period in (2, 3, 6, 16):
        codes += [high if n % period < period / 2 else low for n in range(length // 2)]
    return codes + [draw.randint(low // 64, high // 64) for _ in range(length // 2)]
