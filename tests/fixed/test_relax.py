"""Relaxed programs: the same integers as before, within their proof; and nothing relaxed without one."""

from math import ceil, floor

import numpy as np
import pytest
from attrs import evolve

from afterkick.design.schema import Arithmetic
from afterkick.emit import emit_c
from afterkick.errors import Refused
from afterkick.fixed import simulate, trace
from afterkick.fixed.bounds import worst_input
from afterkick.fixed.carry import with_carry
from afterkick.fixed.program import Move, Preset, Program, Proof, ProvedRange, Role, Sum, Word
from afterkick.fixed.ranges import analyse, require_valid
from afterkick.fixed.relax import Relaxation, relax
from afterkick.fixed.structures import build_program, candidates, operations
from afterkick.fixed.worst_case import WorstCase
from fixed.carried_designs import carried_widths, codes_within, promising, relaxed_programs, transposed
from fixed.random_designs import program_of
from fixed.structure_designs import HALF, ROOMY, at

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
    with pytest.raises(Refused, match=r"nothing can be relaxed, as words may overflow: y \("):
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
    with pytest.raises(Refused, match=r"nothing can be relaxed, as words may overflow: v1 \("):
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
    found = Relaxation(program, program)
    assert not any((found.unchecked, found.narrowed, found.shortened, found.folded))
    assert not any((found.checked, found.wide, found.carried))


def test_a_filter_that_a_preset_may_start_keeps_what_it_has():
    """A preset gives the states values that no run from a reset may reach: no range holds then."""
    program = promising(program_of(([0.1, 0.2, 0.1], [-1.56, 0.64]), coefficient_bits=14), 6000)
    assert relaxed(program) is not program
    wanted = Word("wanted", 16, 15, Role.INPUT)
    with_preset = evolve(program, preset=Preset((wanted,), (Move("y_1", "x"), Move("y_2", "x")), "wanted"))
    assert relaxed(with_preset) is with_preset


def test_nothing_behind_a_clamp_is_proved():
    """What the clamp holds back is not the linear response that the ranges of the words behind it are those of."""
    program = promising(
        program_of(([0.4, 0.1], [-0.5]), ([0.3, 0.2], [-0.5]), coefficient_bits=14, accumulator_bits=64), 16000
    )
    assert {entry.word for entry in relaxed(program).proof.ranges} == {"t1", "v1", "t2", "y"}
    first, second = program.sections
    steps = tuple(
        evolve(step, limits=(-100, 100)) if isinstance(step, Sum) and step.dest == "v1" else step
        for step in first.steps
    )
    clamped = evolve(program, sections=(evolve(first, steps=steps), second))
    found = relax(clamped, WorstCase(program).ranges)
    assert [entry.word for entry in found.proof.ranges] == ["t1"]
    codes = codes_within(program, 0)
    assert (simulate(found, codes) == simulate(clamped, codes)).all()


def test_what_was_saved_and_what_stays():
    """Per word, and in operations by the table in ``structures``."""
    plain = program_of(([0.5, 0.2], [-0.5]), ([1.9, 0.5], [-0.5]), coefficient_bits=14, scaling="none")
    program = promising(with_carry(plain, 1), 16000)
    found = Relaxation(program, relaxed(program))
    assert (found.unchecked, found.checked) == (("v1",), ("y",))
    assert (found.folded, found.carried) == (("v1",), ("y",))
    assert (found.narrowed, found.shortened, found.wide) == ((), (), ())
    wide = promising(program_of(([0.1, 0.2, 0.1], [-1.2, 0.5]), coefficient_bits=16, accumulator_bits=64), 8000)
    assert Relaxation(wide, relaxed(wide)).narrowed == ("t1", "y")
    plain = promising(program_of(([0.1, 0.2, 0.1], [-1.56, 0.64]), coefficient_bits=14), 6000)
    assert operations(plain) - operations(relaxed(plain)) == 2
    carried = promising(with_carry(transposed((3000, 6000, 3000), (16384, -25559, 10486), 14), 2), 2500)
    # before: the residue is cut out and kept (2), moved twice (4), read and added as two terms (4), and y and s1 may
    # saturate (4); now the sum is kept and read (2), and read and added in the two states (4)
    assert operations(carried) - operations(relaxed(carried)) == 14 - 6


def test_a_word_that_can_not_overflow_anyway_is_proved():
    """y = (x + 3 y_1) / 4 in codes: no value of x and y_1 overflows it, though the sum of the worst cases says more."""
    program = with_carry(program_of(([0.25], [-0.75]), coefficient_bits=14), 1)
    (found,) = [entry for entry in WorstCase(program).ranges if entry.word == "y"]
    assert found.from_input + found.from_rounding > 32767
    assert found.fits
    assert analyse(program).may_overflow == frozenset()
    after = relaxed(program)
    assert folded(after) == ["total_y"]
    assert [(one.lowest, one.highest) for one in after.proof.ranges if one.word == "y"] == [(-32768, 32767)]
    for seed in range(4):
        codes = codes_within(program, seed)
        assert (simulate(after, codes) == simulate(program, codes)).all()


@pytest.mark.parametrize("structure", ["direct", "transposed", "delta", "coupled", "parallel", "auto"])
def test_candidates_are_relaxed_where_the_design_asks_for_it(structure):
    arithmetic = Arithmetic(structure=structure)
    plain = {(one.structure, one.carry): one for one in candidates(at("low-pass 2", 20), arithmetic, ROOMY, "probe")}
    listed = candidates(at("low-pass 2", 20), evolve(arithmetic, relax=True), ROOMY, "probe")
    costs = [one.operations for one in listed]
    assert costs == sorted(costs)
    for one in listed:
        other = plain[one.structure, one.carry]
        assert one.relaxation.before == other.program
        assert one.relaxation.after is one.program
        assert one.program.proof is not None
        assert one.operations < other.operations
        assert other.relaxation is None


def test_a_candidate_that_can_not_be_relaxed_is_refused():
    listed = candidates(at("notch", 20), Arithmetic(structure="auto", relax=True), HALF, "probe")
    refused = {one.structure for one in listed if one.program is None}
    assert refused == {"direct", "transposed"}
    assert all("nothing can be relaxed" in str(one.refused[0]) for one in listed if one.program is None)
    with pytest.raises(Refused) as caught:
        build_program(at("notch", 20), Arithmetic(relax=True), HALF, "probe")
    (problem,) = caught.value.problems
    assert problem.where == "arithmetic.relax"
    assert problem.found == "nothing can be relaxed, as words may overflow: y (up to 113.695 % of it)"
    assert problem.remedy == "an output full_scale of 1.138 V or more, or a smaller peak; or relax = false"


def test_a_filter_without_bounds_is_refused():
    """An integrator that nothing clamps."""
    with pytest.raises(Refused, match=r"may overflow: y \(without limit\).*; remedy: relax = false"):
        relaxed(program_of(([1], [-1]), marginal=True))


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


def test_a_proof_of_a_word_that_is_written_twice_is_found():
    """The move would bring in what the sum's range says nothing of."""
    program = program_of(([0.5, 0.5], [-0.5]))
    (section,) = program.sections
    twice = evolve(section, steps=(*section.steps, Move("y_1", "x_1")))
    program = evolve(program, sections=(twice,), proof=Proof(100, (ProvedRange("y", -1, 1),)))
    assert analyse(program).faults == ()
    over = evolve(program.sections[0], steps=(*section.steps, evolve(section.steps[0], dest="y_1")))
    program = evolve(program, sections=(over,), proof=Proof(100, (ProvedRange("y_1", -1, 1),)))
    assert "y_1, which more than one step writes" in "; ".join(analyse(program).faults)
