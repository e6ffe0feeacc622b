"""Zero-input limit cycles and overflow oscillation: the published examples of recursive filters in few bits.

Sources: Proakis and Manolakis, table of limit cycles of single-pole low-pass filters, and Oppenheim and Schafer, the
first-order limit-cycle example (both from memory, recomputed); Jackson, Allerton 1969, dead band k = Int[0.5/(1-|b|)];
Jones, overflow oscillation of 1/(1 - 1/z + 0.5/z^2).

Those tables round the magnitude half up.  Ours is half up towards plus infinity, which is the same for positive values
and differs at negative ties: so the positive sequences are compared, and the negative side is checked to be what our
rule says, a narrower dead band.
"""

from fractions import Fraction
from math import ceil, floor

import pytest
from attrs import evolve

from afterkick.fixed import Program, simulate, trace
from afterkick.fixed.program import Overflow, Sum, Term
from fixed.random_designs import program_of

SHIFT = 20
TABLE = [
    # coefficient, fraction bits, the published sequence in units of 2^-fraction bits
    (Fraction(1, 2), 4, [15, 8, 4, 2, 1, 1, 1, 1]),
    (Fraction(3, 4), 4, [11, 8, 6, 5, 4, 3, 2, 2, 2]),
    (Fraction(1, 2), 3, [7, 4, 2, 1, 1, 1]),
    (Fraction(19, 20), 4, [14, 13, 12, 11, 10, 10, 10]),
]
DEAD_BANDS = [
    (Fraction(1, 2), 1),
    (Fraction(3, 4), 2),
    (Fraction(17, 20), 3),
    (Fraction(9, 10), 5),
    (Fraction(19, 20), 10),
]


def recursion(*coefficients: Fraction, bits: int = 16, overflow: Overflow = Overflow.SATURATE) -> Program:
    """y[n] = Q[sum of coefficients[k] y[n-1-k]] + x[n], the sum rounded once.

    A coefficient that 20 fraction bits can't hold is rounded away from zero, so that a product which is a tie in exact
    numbers still rounds up, as in the published tables.
    """
    model = program_of(([1], [-0.5, 0.25][: len(coefficients)]), data_bits=bits, overflow=overflow.value)
    integers = [ceil(abs(c) * 2**SHIFT) * (1 if c > 0 else -1) for c in coefficients]
    terms = (Term(1 << SHIFT, "x"), *(Term(c, f"y_{k}") for k, c in enumerate(integers, start=1)))
    (section,) = model.sections
    old = next(step for step in section.steps if isinstance(step, Sum) and step.dest == "y")
    new = evolve(old, terms=terms, accumulator_bits=64, right_shift=SHIFT)
    moves = tuple(step for step in section.steps if not isinstance(step, Sum))
    words = tuple(word for word in section.words if not word.name.startswith("t"))
    return evolve(model, sections=(evolve(section, words=words, steps=(new, *moves)),))


@pytest.mark.parametrize(("coefficient", "bits", "sequence"), TABLE, ids=str)
def test_published_sequences(coefficient, bits, sequence):
    program = recursion(coefficient, bits=bits + 1)
    assert simulate(program, [sequence[0]] + [0] * (len(sequence) - 1)).tolist() == sequence


@pytest.mark.parametrize(("coefficient", "k"), DEAD_BANDS, ids=str)
def test_dead_band(coefficient, k):
    assert k == int(Fraction(1, 2) / (1 - coefficient))
    program = recursion(coefficient)
    assert simulate(program, [k] + [0] * 50).tolist() == [k] * 51
    assert simulate(program, [k + 1] + [0] * 50)[-1] == k
    assert simulate(program, [1000] + [0] * 500)[-1] == k


@pytest.mark.parametrize(("coefficient", "k"), DEAD_BANDS[:2], ids=str)
def test_negative_ties_round_up(coefficient, k):
    """From below, the value that the magnitude rule would hold decays by one: floor(-k b + 1/2) = -(k - 1)."""
    assert floor(-k * coefficient + Fraction(1, 2)) == -(k - 1)
    assert simulate(recursion(coefficient), [-k] + [0] * 20).tolist()[:2] == [-k, -(k - 1)]


def test_overflow_oscillation_under_wrap_only():
    """y[-1] = 0.8, y[-2] = -0.8 and zero input: wrap alternates for ever at 0.8, saturation decays (poles at 0.71)."""
    full = 2**15
    start = {"y_1": round(0.8 * full), "y_2": -round(0.8 * full)}
    coefficients = (Fraction(1), Fraction(-1, 2))
    wrapped = trace(recursion(*coefficients, overflow=Overflow.WRAP), [0] * 1000, start).outputs
    assert all(value * (-1) ** n < 0 for n, value in enumerate(wrapped.tolist()))
    # 0.8 of full scale is no integer; the roundings drift by a few counts at most
    assert (abs(abs(wrapped) - 0.8 * full) < 4).all()
    saturated = trace(recursion(*coefficients), [0] * 1000, start).outputs
    assert abs(saturated[-1]) <= 1
