"""Zero-input limit cycles: the bound against every state there is, and against the published rule.

Sources: L. B. Jackson, "An analysis of limit cycles due to multiplication rounding in recursive digital (sub)filters",
Allerton 1969: a first-order section rests within k = Int[0.5 / (1 - |b|)] last places (rule seen in print; the
coefficients below recomputed).  The enumeration is complete: every pair of 8-bit states, so it proves what it shows.
"""

from math import floor

import numpy as np
import pytest

from afterkick.fixed import Program
from afterkick.fixed.narrow import fit, shift_right
from afterkick.fixed.program import Sum
from afterkick.fixed.worst_case import WorstCase
from fixed.random_designs import program_of

JACKSON = [(1, 2, 1), (3, 4, 2), (17, 20, 3), (9, 10, 5), (19, 20, 10)]


def dead_band(program: Program) -> int:
    return floor(next(w for w in WorstCase(program).ranges if w.word == program.output).from_rounding)


def worst_rest(program: Program) -> int:
    """The largest output that any state of (y[n-1], y[n-2]) still shows after a long time without input."""
    (section,) = program.sections
    step = next(step for step in reversed(section.steps) if isinstance(step, Sum))
    codes = np.arange(-128, 128, dtype=np.int64)
    y1, y2 = (grid.ravel() for grid in np.meshgrid(codes, codes))
    a1, a2 = section.a[1], section.a[2]
    worst = 0
    for n in range(6000):
        total = shift_right(-a1 * y1 - a2 * y2, step.right_shift, step.rounding)
        y1, y2 = fit(total, 8, step.overflow), y1
        if n >= 5000:
            worst = max(worst, int(np.max(np.abs(y1))))
    return worst


@pytest.mark.parametrize(("top", "bottom", "k"), JACKSON)
def test_the_bound_is_jacksons_rule_for_first_order_sections(top: int, bottom: int, k: int) -> None:
    # b is stored a hair above the fraction, so that the published tie stays one under ties-up rounding
    program = program_of(([1], [-(top / bottom + 2.0**-24)]), data_bits=8, coefficient_bits=24)
    assert dead_band(program) == worst_rest(program) == k
    mirrored = program_of(([1], [top / bottom]), data_bits=8, coefficient_bits=24)
    assert worst_rest(mirrored) <= dead_band(mirrored) <= k


SECTIONS = [
    [-1.6, 0.68],
    [-1.2, 0.95],
    [0.3, 0.9],
    [-1.9, 0.9125],
    [0.0, 0.9],
    [1.7, 0.8],
    [-0.9, 0.2],
    [-1.96875, 0.984375],
]


@pytest.mark.parametrize("rounding", ["nearest", "floor", "even"])
@pytest.mark.parametrize("a", SECTIONS, ids=str)
def test_no_state_of_a_second_order_section_rests_beyond_the_bound(a: list[float], rounding: str) -> None:
    program = program_of(([0.25], a), data_bits=8, coefficient_bits=16, rounding=rounding)
    rest = worst_rest(program)
    assert rest <= dead_band(program)
    if rounding == "nearest" and a[1] >= 0.9:
        assert rest > 0, "a section that never hums would test nothing"
