"""The key ``carry`` of a design file: a switch or an order."""

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
def test_orders(text, order):
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
def test_everything_else_is_refused(text):
    with pytest.raises(Refused) as caught:
        read_design(f"{DESIGN}carry = {text}\n")
    (problem,) = caught.value.problems
    assert problem.where == "arithmetic.carry"
    assert problem.accepted == "true or false, or the order 1 or 2"
