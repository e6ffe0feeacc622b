"""The choice of a structure: costs by hand, the order of the candidates, and what is said of the others."""

import pytest
from flint import fmpq

from afterkick.design.schema import Arithmetic
from afterkick.errors import Refused
from afterkick.fixed.structures import BUILDERS, build_program, candidates, chosen, operations, state_bytes
from afterkick.fixed.worst_case import WorstCase
from fixed.random_designs import program_of
from fixed.structure_designs import BUILD, ROOMY, at, build

AUTO = Arithmetic(structure="auto")


def left_over(limit):
    """Judges by the bound of what is left once the input has gone, in counts."""

    def judge(program):
        found = next(one.from_rounding for one in WorstCase(program).ranges if one.word == program.output)
        return [] if found < limit else [f"{found:.1f} counts"]

    return judge


def test_every_structure_has_a_builder():
    assert BUILDERS == BUILD


@pytest.mark.parametrize("structure", BUILD)
def test_named_structures_are_built(structure):
    filtered = at("low-pass 2", 20)
    assert build_program(filtered, Arithmetic(structure=structure), ROOMY, "probe") == build(structure, filtered)


def test_operations_by_hand():
    """y = (3 x + y_1) >> 1 in 32 bits, y_1 = y: reads 2, write 1, one product, one sum, shift 2, clamp 2, move 2."""
    program = program_of(([1.5], [-0.5]), data_bits=8, coefficient_bits=8)
    (section,) = program.sections
    assert (section.b[0], section.a) == (96, (128, -64, 0))
    # y = (96 x + 64 y_1) >> 7 after the two binary points: 64 is a power of two
    assert operations(program) == 2 + 1 + 1 + 1 + 2 + 2 + 2
    assert state_bytes(program) == 1


def test_candidates_come_by_cost_and_are_judged_until_one_will_do():
    listed = candidates(at("low-pass 2", 20), AUTO, ROOMY, "probe", judge=left_over(1))
    costs = [one.operations for one in listed if one.operations is not None]
    assert costs == sorted(costs)
    assert len(listed) == 9
    good = [i for i, one in enumerate(listed) if one.good_enough]
    assert len(good) == 1
    assert all(one.falls_short for one in listed[: good[0]])
    assert all(one.falls_short is None for one in listed[good[0] + 1 :])
    assert chosen(listed) is listed[good[0]].program
    assert listed[0].structure == "direct"


def test_the_cheapest_is_taken_where_all_will_do():
    listed = candidates(at("low-pass 2", 20), AUTO, ROOMY, "probe")
    assert chosen(listed) is listed[0].program
    assert build_program(at("low-pass 2", 20), AUTO, ROOMY, "probe") == listed[0].program


def test_the_one_that_falls_short_of_least_is_taken_where_none_will_do():
    def judge(program):
        return ["impulse"] if program.structure == "delta" else ["impulse", "noise"]

    assert chosen(candidates(at("low-pass 2", 20), AUTO, ROOMY, "probe", judge=judge)).structure == "delta"


def test_refused_structures_are_listed_with_their_reason():
    listed = candidates(at("low-pass 2", 10_000), AUTO, ROOMY, "probe", judge=left_over(1))
    refused = {one.structure: str(one.refused[0]) for one in listed if one.program is None}
    assert refused.keys() == {"direct", "transposed"}
    assert all("unit circle" in text for text in refused.values())
    assert chosen(listed).structure in ("delta", "parallel")


def test_every_structure_refused():
    with pytest.raises(Refused, match='structure "delta"'):
        build_program(
            at("low-pass 2", 20), Arithmetic(structure="auto", data_bits=32, accumulator_bits=32), ROOMY, "probe"
        )


def test_what_integrates_is_kept_apart():
    """The parallel structure comes first, though the direct one is cheaper."""
    listed = candidates(at("integrator, lag", 100), AUTO, ROOMY, "probe")
    assert chosen(listed).structure == "parallel"
    costs = {one.structure: one.operations for one in listed}
    assert costs["direct"] < costs["parallel"]


def test_clamp_is_for_the_parallel_structure():
    listed = candidates(at("low-pass 2", 20), Arithmetic(structure="auto", clamp=(fmpq(-1), fmpq(1))), ROOMY, "probe")
    assert chosen(listed).structure == "parallel"
    refused = [one for one in listed if one.program is None]
    assert {one.structure for one in refused} == set(BUILD) - {"parallel"}
    assert all("arithmetic.clamp" in str(problem) for one in refused for problem in one.refused)


@pytest.mark.parametrize("structure", BUILD)
def test_error_feedback_in_every_structure(structure):
    """With a second-order carry a constant error is pushed out of every fed-back sum; the filter stays the same."""
    filtered = at("low-pass 2", 100)
    plain, carried = (build(structure, filtered, carry=order) for order in (0, 2))
    assert (plain.carry, carried.carry) == (0, 2)
    assert [section.b for section in plain.sections] == [section.b for section in carried.sections]
    if structure in ("direct", "transposed"):
        noise = [WorstCase(program).noise_rms for program in (plain, carried)]
        assert noise[1] < noise[0] / 3
