"""Relaxed programs: the same integers as before, within their proof; and nothing relaxed without one."""

from math import ceil, floor

import numpy as np
import pytest
from attrs import evolve

from afterkick.emit import emit_c
from afterkick.errors import Refused
from afterkick.fixed import Program, simulate, trace
from afterkick.fixed.bounds import WorstCase, worst_input
from afterkick.fixed.carry import with_carry
from afterkick.fixed.program import Proof, ProvedRange, Sum
from afterkick.fixed.ranges import analyse, require_valid
from afterkick.fixed.relax import relax
from fixed.carried_designs import carried_widths, codes_within, promising, relaxed_programs, transposed
from fixed.random_designs import program_of

DESIGNS = relaxed_programs(40)


def relaxed(program: Program) -> Program:
    return relax(program, WorstCase(program).ranges)


def folded(program: Program) -> list[str]:
    return [step.dest for step in program.steps if isinstance(step, Sum) and step.dest.startswith("total_")]


def attaining(program: Program) -> np.ndarray:
    """Inputs that drive each recursive word as far as any can, up to the roundings, and their negatives."""
    worst = WorstCase(program)
    recursive = [response for response in worst.to_input.values() if response.denominator.degree()]
    inputs = [worst_input(program, response, worst.peak_code)[-600:] for response in recursive]
    highest = program.word(program.input).highest
    return np.array([*inputs, *(np.minimum(-codes, highest) for codes in inputs)]).T


@pytest.mark.parametrize(("seed", "before", "after"), DESIGNS, ids=[str(design[0]) for design in DESIGNS])
def test_same_integers(seed, before, after):
    require_valid(after)
    codes = codes_within(before, seed)
    assert (simulate(after, codes) == simulate(before, codes)).all(), f"seed {seed}"
    columns = attaining(before)
    assert (simulate(after, columns) == simulate(before, columns)).all(), f"seed {seed}"


def test_the_designs_above_fold_both_orders():
    orders = [after.carry for _, _, after in DESIGNS if folded(after)]
    assert orders.count(1) >= 8
    assert orders.count(2) >= 3


@pytest.mark.parametrize("rounding", ["nearest", "floor", "even"])
@pytest.mark.parametrize("order", [1, 2])
def test_direct_form_carries_its_sum_over(order, rounding):
    carried = with_carry(program_of(([0.1, 0.2, 0.1], [-1.56, 0.64]), coefficient_bits=14, rounding=rounding), order)
    before = promising(carried, 6000)
    after = relaxed(before)
    assert folded(after) == ["total_y"]
    assert carried_widths(after) == set()
    total = next(step for step in after.steps if isinstance(step, Sum) and step.dest == "total_y")
    old = next(step for step in before.steps if isinstance(step, Sum) and step.dest == "y")
    change = {1: [-1], 2: [-2, 1]}[order]
    for age, factor in enumerate(change, start=1):
        coefficients = [sum(t.factor for t in step.terms if t.word == f"y_{age}") for step in (old, total)]
        assert coefficients[1] - coefficients[0] == factor << old.right_shift
    for seed in range(4):
        codes = codes_within(before, seed)
        assert (simulate(after, codes) == simulate(before, codes)).all()


@pytest.mark.parametrize("rounding", ["nearest", "floor", "even"])
@pytest.mark.parametrize("order", [1, 2])
def test_transposed_form_carries_its_sum_in_its_states(order, rounding):
    carried = with_carry(transposed((3000, 6000, 3000), (16384, -25559, 10486), 14, rounding=rounding), order)
    before = promising(carried, 2500)
    after = relaxed(before)
    assert folded(after) == ["total_y"]
    assert [word.name for word in after.words] == ["x", "y", "s1", "s2", "total_y"]
    for seed in range(4):
        codes = codes_within(before, seed)
        assert (simulate(after, codes) == simulate(before, codes)).all()
    columns = attaining(before)
    assert (simulate(after, columns) == simulate(before, columns)).all()


@pytest.mark.parametrize(("order", "weights"), [(1, {"s1": [1], "s2": []}), (2, {"s1": [2, -1], "s2": [-1]})])
def test_states_that_take_a_sum_along_have_room_for_what_it_drops(order, weights):
    """s1 = its old value + 2 r[n] - r[n-1], s2 = its old value - r[n] (order 2), each r from -2^13 to 2^13 - 1."""
    before = promising(with_carry(transposed((3000, 6000, 3000), (16384, -25559, 10486), 14), order), 2500)
    old = {word.word: word for word in WorstCase(before).ranges}
    proved = {entry.word: entry for entry in relaxed(before).proof.ranges}
    for state, factors in weights.items():
        ends = [sorted((-8192 * factor, 8191 * factor)) for factor in factors]
        assert proved[state].lowest == ceil(old[state].lowest) + sum(low for low, _ in ends)
        assert proved[state].highest == floor(old[state].highest) + sum(high for _, high in ends)


@pytest.mark.parametrize("order", [0, 1, 2])
def test_where_clipping_is_possible_nothing_is_touched(order):
    """A low-pass with DC gain 1.5: what the sum drops may be carried whole only as long as nothing clips."""
    plain = program_of(([0.15, 0.15], [-0.8]), coefficient_bits=16, scaling="none")
    program = with_carry(plain, order) if order else plain
    with pytest.raises(Refused, match="nothing can be relaxed: y may reach"):
        relaxed(program)
    assert (simulate(program, [32767] * 300)[20:] == 32767).all()


def test_a_false_proof_is_noticed():
    """The same low-pass, folded as if nothing could clip: the run ends as soon as a word leaves its range."""
    program = with_carry(program_of(([0.15, 0.15], [-0.8]), coefficient_bits=14, scaling="none"), 1)
    wrong = tuple(
        evolve(word, lowest=-30000.0, highest=30000.0) if word.word == "y" else word
        for word in WorstCase(program).ranges
    )
    after = relax(program, wrong)
    small = [10000] * 300
    assert (simulate(after, small) == simulate(program, small)).all()
    for codes in ([32767] * 300, np.full((300, 20), 32767)):
        with pytest.raises(Refused, match="leaves the range"):
            simulate(after, codes)


def test_inputs_and_states_beyond_the_proof_are_refused():
    before = promising(with_carry(program_of(([0.1, 0.2, 0.1], [-1.56, 0.64]), coefficient_bits=14), 1), 6000)
    after = relaxed(before)
    assert simulate(after, [6000, -6000]).shape == (2,)
    for codes in ([6001], [-6001]):
        simulate(before, codes)
        with pytest.raises(Refused, match="-6000 to 6000"):
            simulate(after, codes)
    (proved,) = [entry for entry in after.proof.ranges if entry.word == "y"]
    with pytest.raises(Refused, match="y_1 ="):
        trace(after, [0], {"y_1": proved.highest + 1})


@pytest.mark.parametrize(("seed", "before", "after"), DESIGNS[:12], ids=[str(design[0]) for design in DESIGNS[:12]])
def test_bounds_of_the_relaxed_program_agree_with_its_proof(seed, before, after):
    """Derived anew from the relaxed steps, the ranges of all words are those of the proof; the noise is the same."""
    proved = {entry.word: entry for entry in after.proof.ranges}
    for word in WorstCase(after).ranges:
        if word.word in proved:
            result = word.word.removeprefix("total_")
            count = 1 << (after.word(word.word).fraction_bits - after.word(result).fraction_bits)
            assert proved[word.word].lowest == pytest.approx(word.lowest, abs=2 * count)
            assert proved[word.word].highest == pytest.approx(word.highest, abs=2 * count)
    assert WorstCase(after).noise_rms == pytest.approx(WorstCase(before).noise_rms, rel=1e-9)


def test_only_words_before_a_doubtful_one_are_proved():
    """The second section may clip: the first one is relaxed, the second keeps its saturation and its residue."""
    program = with_carry(program_of(([0.1, 0.2], [-0.5]), ([1.9, 0.5], [-0.5]), coefficient_bits=14, scaling="none"), 1)
    assert {word.word for word in WorstCase(program).ranges if not word.fits} == {"y"}
    after = relaxed(program)
    assert "v1" not in analyse(after).may_overflow
    assert "y" in analyse(after).may_overflow
    assert folded(after) == ["total_v1"]
    for seed in range(4):
        codes = codes_within(program, seed)
        assert (simulate(after, codes) == simulate(program, codes)).all()


def test_a_word_behind_a_doubtful_one_is_not_proved():
    """The output fits as long as the first section does not clip, which is not proved."""
    program = with_carry(
        program_of(([1.9, 0.5], [-0.5]), ([0.05, 0.05], [-0.5]), coefficient_bits=14, scaling="none"), 1
    )
    assert {word.word for word in WorstCase(program).ranges if not word.fits} == {"v1"}
    with pytest.raises(Refused, match="nothing can be relaxed: v1 may reach"):
        relaxed(program)


def test_a_proof_narrows_sums_and_words():
    program = promising(program_of(([0.1, 0.2, 0.1], [-1.2, 0.5]), coefficient_bits=16, accumulator_bits=64), 8000)
    after = relaxed(program)
    assert {step.accumulator_bits for step in program.steps if isinstance(step, Sum)} == {64}
    assert {step.accumulator_bits for step in after.steps if isinstance(step, Sum)} == {32}
    codes = codes_within(program, 0)
    assert (simulate(after, codes) == simulate(program, codes)).all()


def test_nothing_to_save():
    program = program_of(([0.25], []))
    assert relaxed(program) is program


def test_proof_is_told_in_the_header():
    before = promising(with_carry(program_of(([0.1, 0.2, 0.1], [-1.56, 0.64]), coefficient_bits=14), 1), 6000)
    after = relaxed(before)
    files = emit_c(after)
    header = " ".join(files["probe.h"].replace("*", " ").split())
    assert "Proved, from a reset on and for input codes from -6000 to 6000" in header
    for entry in after.proof.ranges:
        assert f"{entry.word}: {entry.lowest} to {entry.highest}; the word holds" in header
    assert "The code must be from -6000 to 6000" in header
    assert "clamp" in emit_c(before)["probe.c"]
    assert "clamp" not in files["probe.c"]
    assert "less 2^12 for the sum that is carried over" in files["probe.c"]


@pytest.mark.parametrize(
    ("entry", "fault"),
    [
        (ProvedRange("nonsense", 0, 1), "speaks of nonsense"),
        (ProvedRange("x", 0, 1), "speaks of x"),
        (ProvedRange("y", 0, 40000), "wider than the word"),
        (ProvedRange("y", 1, 2), "without the 0"),
    ],
    ids=lambda value: getattr(value, "word", None),
)
def test_faulty_proofs_are_found(entry, fault):
    program = evolve(program_of(([0.5], [-0.5])), proof=Proof(100, (entry,)))
    assert fault in "; ".join(analyse(program).faults)
