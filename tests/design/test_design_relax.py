"""The key ``relax`` of a design file: a switch that is part of the design's digest."""

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


@pytest.mark.parametrize(("line", "value"), [("", False), ("relax = false", False), ("relax = true", True)])
def test_values(line, value):
    assert read_design(f"{DESIGN}{line}\n").arithmetic.relax is value


def test_the_digest_tells_them_apart():
    absent, off, on = (
        canonical_text(read_design(f"{DESIGN}{line}\n")) for line in ("", "relax = false", "relax = true")
    )
    assert absent == off != on
    assert "arithmetic.relax = True\n" in on


@pytest.mark.parametrize("text", ["1", "0", '"true"', "[true]", "1.0"])
def test_everything_else_is_refused(text):
    with pytest.raises(Refused) as caught:
        read_design(f"{DESIGN}relax = {text}\n")
    (problem,) = caught.value.problems
    assert problem.where == "arithmetic.relax"
    assert problem.accepted == "true or false"


def test_a_near_miss_is_named():
    with pytest.raises(Refused, match="relax"):
        read_design(f"{DESIGN}relaxed = true\n")
