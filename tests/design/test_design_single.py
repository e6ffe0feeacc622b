"""Which keys single precision takes, and that it refuses each of the others by name."""

import attrs
import pytest
from flint import fmpq

from afterkick.design import read_design
from afterkick.design.schema import Arithmetic
from afterkick.errors import Problem, Refused
from cli.shared import lag_with

SINGLE = '[arithmetic]\nkind = "float32"\n'
VALUES = {
    "data_bits": "16",
    "coefficient_bits": "24",
    "structure": '"direct"',
    "rounding": '"nearest"',
    "overflow": '"saturate"',
    "carry": "false",
    "state_bits": "32",
    "accumulator_bits": "64",
    "scaling": '"none"',
    "clamp": "[-1, 1]",
    "relax": "false",
}
"""Also a default is refused where it is written."""


def problems_of(more: str) -> list[Problem]:
    with pytest.raises(Refused) as refusal:
        read_design(lag_with(more))
    return list(refusal.value.problems)


def test_every_key_is_decided():
    assert {*VALUES, "kind", "flush_below"} == {field.name for field in attrs.fields(Arithmetic)}


@pytest.mark.parametrize("key", VALUES)
def test_a_key_of_integers_is_refused_by_name(key):
    (problem,) = problems_of(f"{SINGLE}{key} = {VALUES[key]}")
    assert problem.where == f"arithmetic.{key}"
    assert problem.remedy == f"remove {key}"
    assert "float32" in str(problem)


def test_all_of_them_at_once():
    lines = "".join(f"{key} = {value}\n" for key, value in VALUES.items())
    assert {problem.where for problem in problems_of(SINGLE + lines)} == {f"arithmetic.{key}" for key in VALUES}


@pytest.mark.parametrize("line", ["data_bits = 7", "clamp = [1, -1]", "clamp = [-9, 9]", "clamp = 3", "carri = 1"])
def test_one_message_a_key(line):
    assert len(problems_of(SINGLE + line)) == 1


@pytest.mark.parametrize("key", ["worst_case_counts", "noise_counts", "dead_band_counts"])
def test_a_limit_in_counts_is_refused(key):
    (problem,) = problems_of(f"{SINGLE}[budget]\n{key} = 1")
    assert problem.where == f"budget.{key}"
    assert "output units" in problem.remedy


def test_what_is_taken():
    signals = '[signals]\ninput = { unit = "bar", peak = 12 }\n'
    design = read_design(lag_with(f'{signals}{SINGLE}structure = "transposed"\nflush_below = 1e-30'))
    assert design.arithmetic.kind == "float32"
    assert design.arithmetic.flush_below == fmpq(1, 10**30)
    assert design.signals.input.peak == 12  # beyond the default full scale, which no single ends at


def test_what_integers_do_not_take():
    (problem,) = problems_of("[arithmetic]\nflush_below = 1e-30")
    assert (problem.where, problem.accepted) == ("arithmetic.flush_below", 'only with kind = "float32"')
    (problem,) = problems_of("[signals]\ninput = { peak = 12 }")
    assert problem.where == "signals.input.peak"
