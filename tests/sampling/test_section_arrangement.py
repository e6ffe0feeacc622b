"""Sections in an arrangement of their own: the same filter, and the same sections at every working precision."""

import random

import pytest
from attrs import evolve
from flint import acb, arb, fmpq

from afterkick.design.schema import Bandpass, Bandstop, Gain, Highpass, Lag, LeadLag, Lowpass, Notch
from afterkick.numbers import working_bits
from afterkick.sampling.pulse_transfer import ZRoot
from afterkick.sampling.sampled import Sampled
from afterkick.sampling.sections import Arrangement, in_order, paired_by_rule
from helpers import BITS, blocks, overlap, pulse, sampled

MODELS = {
    "low-pass 7": blocks(Lowpass("butterworth", 7, fmpq(1))),
    "elliptic 6": blocks(Lowpass("elliptic", 6, fmpq(1), ripple_db=fmpq(1, 2), stop_db=fmpq(60))),
    "high-pass 5": blocks(Highpass("chebyshev", 5, fmpq(1), ripple_db=fmpq(1, 2))),
    "band-pass 6": blocks(Bandpass("butterworth", 3, fmpq(1, 2), fmpq(2))),
    "band-stop 6": blocks(Bandstop("butterworth", 3, fmpq(1, 2), fmpq(2))),
    "notches": blocks(Notch(fmpq(1), fmpq(5)), Notch(fmpq(1), fmpq(5)), Notch(fmpq(2), fmpq(5))),
    "lags": blocks(*[Lag(corner_hz=fmpq(n)) for n in (1, 1, 2, 3, 4)]),
    "lead-lags": blocks(*[LeadLag(fmpq(n), fmpq(n, 3)) for n in (1, 2, 3)], Gain(fmpq(7))),
}
METHODS = ("bilinear", "zero-order-hold", "first-order-hold", "impulse-invariant", "matched", "backward-difference")
CASES = [(name, method) for name in MODELS for method in METHODS]


def any_arrangement(filtered: Sampled, draw: random.Random) -> Arrangement:
    """The pole groups of the rule in any order, with any zeros that fit: none left over, and no more than poles."""
    transfer = filtered.transfer()
    poles, zeros = in_order(transfer.poles), in_order(transfer.zeros)
    assert poles is not None
    assert zeros is not None
    free_poles = list(range(len(poles)))
    order = []
    for group, _ in paired_by_rule(transfer):
        places = []
        for pole in group:
            # a repeated pole is one object
            places.append(next(i for i in free_poles if poles[i] is pole))
            free_poles.remove(places[-1])
        order.append(tuple(places))
    assert not free_poles
    draw.shuffle(order)
    while True:
        room = [sum(poles[i].degree for i in group) for group in order]
        taken: list[list[int]] = [[] for _ in order]
        for place in draw.sample(range(len(zeros)), len(zeros)):
            fitting = [k for k, free in enumerate(room) if free >= zeros[place].degree]
            if not fitting:
                break
            k = draw.choice(fitting)
            room[k] -= zeros[place].degree
            taken[k].append(place)
        else:
            return Arrangement(tuple(order), tuple(map(tuple, taken)))


@pytest.mark.parametrize(("name", "method"), CASES)
def test_any_arrangement_is_the_same_filter(name: str, method: str) -> None:
    """Against the factored transfer function, at points all over the plane; and its pulse response."""
    filtered = sampled(MODELS[name], 20, method)
    draw = random.Random(f"{name} {method}")
    for _ in range(5):
        other = evolve(filtered, arrangement=any_arrangement(filtered, draw))
        sections = other.sections(200)
        assert [section.order for section in sections] == [
            sum(pole.degree for pole in ours)
            for ours, _ in other.arrangement.roots(filtered.transfer(256))  # type: ignore[union-attr]  # has one
        ]
        assert overlap(pulse(sections, 12), pulse(filtered.sections(200), 12))
        with working_bits(BITS):
            for place in (acb(1, "0.1"), acb("-0.3", "0.8"), acb("0.01", "1.2"), acb("-0.9")):
                product = acb(1)
                for section in sections:
                    (b0, b1, b2), (_, a1, a2) = section.b, section.a
                    product *= (b0 + place * (b1 + place * b2)) / (1 + place * (a1 + place * a2))
                    assert (section.b_at_one - (b0 + b1 + b2)).contains(0)
                assert (product - filtered.transfer(256).at(place)).contains(0)
                assert product.rel_accuracy_bits() > 100


@pytest.mark.parametrize(("name", "method"), CASES)
def test_the_same_at_every_working_precision(name: str, method: str) -> None:
    filtered = sampled(MODELS[name], 20, method)
    arrangement = any_arrangement(filtered, random.Random(f"{name} {method}"))
    coarse, fine = (evolve(filtered, arrangement=arrangement).sections(bits) for bits in (64, 1024))
    for one, other in zip(coarse, fine, strict=True):
        assert all(x.overlaps(y) for x, y in zip((*one.b, *one.a), (*other.b, *other.a), strict=True))
        assert one.order == other.order


def test_zeros_at_one_and_minus_one_stay_exact() -> None:
    filtered = sampled(MODELS["band-pass 6"], 20, "bilinear")
    transfer = filtered.transfer()
    poles = in_order(transfer.poles)
    assert poles is not None
    # in order: -1 three times, then 1 three times
    other = evolve(filtered, arrangement=Arrangement(((2,), (0,), (1,)), ((0, 1), (2, 3), (4, 5))))
    sections = other.sections(100)
    assert [section.b_at_one.is_zero() for section in sections] == [False, True, True]
    assert [(s.b[0] - s.b[1] + s.b[2]).contains(0) for s in sections] == [True, True, False]
    shapes = [[float(value / section.b[0]) for value in section.b] for section in sections]
    assert shapes == [[1, 2, 1], [1, 0, -1], [1, -2, 1]]


def test_the_rule_as_an_arrangement_gives_the_sections_of_the_rule() -> None:
    filtered = sampled(MODELS["elliptic 6"], 20, "bilinear")
    transfer = filtered.transfer()
    poles, zeros = in_order(transfer.poles), in_order(transfer.zeros)
    assert poles is not None
    assert zeros is not None
    rule = paired_by_rule(transfer)
    arrangement = Arrangement(
        tuple(tuple(poles.index(one) for one in ours) for ours, _ in rule),
        tuple(tuple(zeros.index(one) for one in theirs) for _, theirs in rule),
    )
    again = evolve(filtered, arrangement=arrangement).sections(100)
    for one, other in zip(again, filtered.sections(100), strict=True):
        assert (str(one.b), str(one.a)) == (str(other.b), str(other.a))


def test_order_that_needs_more_bits() -> None:
    def roots(bits: int) -> list[ZRoot]:
        with working_bits(bits):
            third = arb(1) / 3
            return [ZRoot(acb(third + arb(2) ** -200), True), ZRoot(acb(third), True), ZRoot(acb(0, third), False)]

    with working_bits(128):
        assert in_order(roots(128)) is None
    with working_bits(512):
        listed = roots(512)
        found = in_order(listed)
        assert found is not None
        assert [next(i for i, one in enumerate(listed) if one is root) for root in found] == [2, 1, 0]
        flat = ZRoot(acb(arb(1), arb(0, "1e-30")), False)
        assert in_order([flat]) is None, "it may be two real roots"
        twice = ZRoot(acb(-1), True)
        assert in_order([twice, twice]) == [twice, twice]
