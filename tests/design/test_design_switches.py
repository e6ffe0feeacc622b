"""The keys ``carry`` and ``relax`` of a design file: a switch or an order, and a switch; both are in the digest."""

import pytest

from afterkick.design import read_design
from afterkick.design.digest import canonical_text
from afterkick.errors import Refused

DESIGN = """
[design]
name = "yaw"
[model]
kind = "ode"
output = [1.0, 2.0]
input = [2.0]
[sampling]
rate_hz = 100
method = "bilinear"
[arithmetic]
"""


@pytest.mark.parametrize(("text", "order"), [("false", 0), ("true", 1), ("1", 1), ("2", 2)])
def test_orders_of_carry(text, order):
    design = read_design(f"{DESIGN}carry = {text}\n")
    assert design.arithmetic.carry == order
    assert design.arithmetic.carry is not True


def test_two_spellings_of_one_order_have_one_digest():
    texts = [
        canonical_text(read_design(f"{DESIGN}{line}")) for line in ("", "carry = false", "carry = true", "carry = 1")
    ]
    assert texts[0] == texts[1]
    assert texts[2] == texts[3] != texts[0]
    assert "arithmetic.carry = False\n" in texts[0]
    assert "arithmetic.carry = 1\n" in texts[2]


@pytest.mark.parametrize("text", ["0", "3", "-1", "1.0", '"2"', "[1]", "1979-05-27", "9" * 500])
def test_every_other_carry_is_refused(text):
    with pytest.raises(Refused) as caught:
        read_design(f"{DESIGN}carry = {text}\n")
    (problem,) = caught.value.problems
    assert problem.where == "arithmetic.carry"
    assert problem.accepted == "true or false, or the order 1 or 2"


@pytest.mark.parametrize(("line", "value"), [("", False), ("relax = false", False), ("relax = true", True)])
def test_values_of_relax(line, value):
    assert read_design(f"{DESIGN}{line}\n").arithmetic.relax is value


def test_the_digest_tells_values_of_relax_apart():
    absent, off, on = (
        canonical_text(read_design(f"{DESIGN}{line}\n")) for line in ("", "relax = false", "relax = true")
    )
    assert absent == off != on
    assert "arithmetic.relax = True\n" in on


@pytest.mark.parametrize("text", ["1", "0", '"true"', "[true]", "1.0"])
def test_every_other_relax_is_refused(text):
    with pytest.raises(Refused) as caught:
        read_design(f"{DESIGN}relax = {text}\n")
    (problem,) = caught.value.problems
    assert problem.where == "arithmetic.relax"
    assert problem.accepted == "true or false"


def test_a_near_miss_of_relax_is_named():
    with pytest.raises(Refused, match="relax"):
        read_design(f"{DESIGN}relaxed = true\n")
