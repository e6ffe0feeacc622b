"""Filters for tests of single precision: random sections from a seed."""

import random
from math import cos, pi

from attrs import evolve
from flint import fmpq

from afterkick.design.schema import Lag, Signal, Signals
from afterkick.errors import Refused
from afterkick.floating import FloatProgram, float_program
from afterkick.sampling import Sampled
from afterkick.sampling.rational_cascade import rational_cascade
from fixed.random_designs import PlainSampled, exact
from helpers import blocks, sampled

SIGNALS = Signals(Signal("g", fmpq(16), fmpq(12)), Signal("m/s^2", fmpq(320)))


def _denominator(draw: random.Random, order: int, closest: float) -> list[float]:
    radius = 1 - closest * 10 ** draw.uniform(0, 1)
    if order == 1:
        return [draw.choice((-1, -1, 1)) * radius]
    if draw.random() < 0.3:
        other = draw.uniform(-0.9, 0.9)
        return [-(radius + other), radius * other]
    angle = draw.choice((draw.uniform(0.02, pi - 0.02), pi / 2))
    return [-2 * radius * cos(angle), radius * radius]


def _numerator(draw: random.Random, order: int) -> list[float]:
    gain = draw.choice((1, -1)) * 10 ** draw.uniform(-4, 2)
    if order == 1:
        return [gain * x for x in draw.choice(([1, 1], [1, -1], [1, 0], [0, 1], [1, draw.uniform(-1, 1)]))]
    shapes = ([1, 2, 1], [1, -2, 1], [1, 0, -1], [0, 1, draw.uniform(-1, 1)], [0, 0, 1], [1, draw.uniform(-2, 2), 1])
    if draw.random() < 0.2:
        return [float(draw.choice((1, -1))), draw.uniform(-2, 2), draw.uniform(-1, 1)]
    return [gain * x for x in draw.choice((*shapes, [1, draw.uniform(-2, 2), draw.uniform(-1, 1)]))]


def as_sampled(plain: PlainSampled) -> Sampled:
    """The same filter as one whose poles and zeros are known."""
    sections = [([exact(x) for x in b], [fmpq(1), *(exact(x) for x in a)]) for b, a in plain.coefficients]
    model = blocks(Lag(corner_hz=fmpq(1)))
    return evolve(sampled(model, 1000, "bilinear"), attempt=lambda: rational_cascade(sections, fmpq(1)))


def random_filter(seed: int, closest: float = 1e-3) -> tuple[FloatProgram, PlainSampled]:
    """The first design of this seed that is not refused; poles at least ``closest`` inside the unit circle."""
    draw = random.Random(seed)
    while True:
        order = draw.randint(1, 8)
        sections = tuple(
            (_numerator(draw, n), _denominator(draw, n, closest)) for n in [2] * (order // 2) + [1] * (order % 2)
        )
        sampled = PlainSampled(sections, draw.choice((0, 0, 0, 1, 3)))
        flush = draw.choice((None, None, fmpq(1, 10**30)))
        try:
            program = float_program(
                sampled, SIGNALS, f"single{seed}", title=f"random filter {seed}", digest="01234567", flush_below=flush
            )
            return program, sampled
        except Refused:
            continue
