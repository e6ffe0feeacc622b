"""How far sums get on the way: never beyond what is said, and not needlessly far from it."""

import random

import pytest

from afterkick.fixed.narrow import fit, rounding_offset, shift_right
from afterkick.fixed.program import Sum
from afterkick.fixed.worst_case import WorstCase
from fixed.structure_designs import BUILD, HALF, at, build


def furthest(program, codes):
    """The largest magnitude of any partial sum, in the worst order of the terms, with the rounding's offset."""
    words = {word.name: 0 for word in program.words}
    found = {}
    for code in codes:
        words[program.input] = code
        for step in program.steps:
            if not isinstance(step, Sum):
                words[step.dest] = words[step.source]
                continue
            products = [term.factor * words[term.word] for term in step.terms]
            up = sum(max(product, 0) for product in products) + rounding_offset(step.right_shift, step.rounding)
            down = -sum(min(product, 0) for product in products)
            found[step.dest] = max(found.get(step.dest, 0), up, down)
            total = shift_right(sum(products), step.right_shift, step.rounding)
            words[step.dest] = fit(total, program.word(step.dest).bits, step.overflow)
    return found


@pytest.mark.parametrize("model", ["low-pass 2", "low-pass 5", "notch", "lead-lag"])
@pytest.mark.parametrize("structure", BUILD)
def test_no_partial_sum_gets_further_than_is_said(structure, model):
    program = build(structure, at(model, 20, "bilinear"), signals=HALF, data_bits=12, coefficient_bits=24)
    worst = WorstCase(program)
    proved = all(word.fits for word in worst.ranges)
    assert proved or model != "low-pass 2"
    draw = random.Random(2)
    peak = worst.peak_code
    codes = [draw.choice((-peak, peak)) for _ in range(2000)] + [peak] * 500 + [-peak] * 500
    codes += [peak if n % 20 < 10 else -peak for n in range(1000)]
    said = {one.word: one.partial_sum for one in worst.sums}
    for name, reached in furthest(program, codes).items():
        assert reached <= said[name]
        if proved:
            assert reached > said[name] / 4
