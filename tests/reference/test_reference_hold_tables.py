"""Tables of hold equivalents and of impulse-invariance pairs, in balls."""

import ast
import operator
from collections.abc import Mapping, Sequence
from typing import Any

import pytest
from flint import arb, fmpq, fmpq_poly

from afterkick.model.factors import from_polynomials
from afterkick.model.model import Model, build
from afterkick.model.roots import RADIANS
from afterkick.numbers import working_bits
from helpers import exact, multiplied, overlap, reference, sampled

TABLES = reference("hold_tables")
VALUES = {name: exact(text) for name, text in TABLES["values"].items()}
OPERATORS = {
    ast.Add: operator.add,
    ast.Sub: operator.sub,
    ast.Mult: operator.mul,
    ast.Div: operator.truediv,
    ast.Pow: operator.pow,
}
BITS = 200


def evaluated(text: str, names: Mapping[str, Any]) -> Any:
    """Sums, products, quotients, whole powers, and sin, of the names; nothing else."""

    def value(node: ast.expr) -> Any:
        match node:
            case ast.Constant(value=int(number)):
                return fmpq(number)
            case ast.Name(id=name):
                return names[name]
            case ast.UnaryOp(op=ast.USub(), operand=operand):
                return -value(operand)
            case ast.BinOp(left=left, op=ast.Pow(), right=ast.Constant(value=int(power))):
                return value(left) ** power
            case ast.BinOp(left=left, op=op, right=right):
                return OPERATORS[type(op)](value(left), value(right))
            case ast.Call(func=ast.Name(id=("sin" | "cos") as function), args=[argument]):
                return getattr(value(argument), function)()
        raise AssertionError(ast.dump(node))

    return value(ast.parse(text.replace("^", "**"), mode="eval").body)


def table_names() -> dict[str, arb]:
    """The notation of the tables: E = e^(-aT), Eb = e^(-bT), c and si of wT, and those of the damped pair."""
    names = {name: arb(value) for name, value in VALUES.items()}
    a, b, T, w, zeta, w0 = (names[name] for name in ("a", "b", "T", "w", "zeta", "w0"))
    wd = w0 * (1 - zeta * zeta).sqrt()
    return names | {
        "E": (-a * T).exp(),
        "Eb": (-b * T).exp(),
        "c": (w * T).cos(),
        "si": (w * T).sin(),
        "wd": wd,
        "al": (-zeta * w0 * T).exp(),
        "be": (wd * T).cos(),
        "ga": (wd * T).sin(),
        "q": zeta * w0 / wd,
    }


def model_of_text(text: str) -> Model:
    names = VALUES | {"s": fmpq_poly([0, 1])}
    top, bottom = (fmpq_poly([1]) * evaluated(part, names) for part in text.split("/", 1))
    return build(from_polynomials(top, bottom, RADIANS))


def product_of_sections(model: Model, method: str, **options: str) -> tuple[list[arb], list[arb]]:
    sections = sampled(model, 1 / VALUES["T"], method, **options).sections(BITS)
    return multiplied([s.b for s in sections]), multiplied([s.a for s in sections])


def equal(found: list[arb], expected: Sequence[arb], relative: float = 1e-50) -> bool:
    """Equal as polynomials in 1/z; what is longer must be filled with exact zeros."""
    padded = list(expected) + [arb(0)] * (len(found) - len(expected))
    return overlap(found, padded, relative)


@pytest.mark.parametrize(
    ("method", "row"),
    [("zero-order-hold", row) for row in TABLES["zoh"]] + [("first-order-hold", row) for row in TABLES["foh_triangle"]],
    ids=lambda value: value["g"] if isinstance(value, dict) else value,
)
def test_hold_equivalent(method: str, row: dict[str, Any]) -> None:
    """Astrom and Wittenmark, Computer-Controlled Systems, Table 2.1; Franklin, Powell and Workman, Digital Control of
    Dynamic Systems, Appendix B and section 6.3.2 (triangle hold)."""
    b, a = product_of_sections(model_of_text(row["g"]), method)
    with working_bits(400):
        names = table_names()
        num, den = ([arb(evaluated(text, names)) for text in row[key]] for key in ("num", "den"))
    # The table has descending powers of z: what num lacks in length is powers of 1/z in front.
    assert equal(b, [arb(0)] * (len(den) - len(num)) + num)
    assert equal(a, den)


@pytest.mark.parametrize("row", TABLES["impulse_invariance"], ids=lambda row: row["g"])
def test_impulse_invariance_pair(row: dict[str, Any]) -> None:
    """Impulse-invariance pairs with the factor T and the whole h(0+), as in any z-transform table."""
    b, a = product_of_sections(model_of_text(row["g"]), "impulse-invariant", first_sample="full")
    with working_bits(400):
        names = table_names()
        num, den = ([arb(evaluated(text, names)) for text in row[key]] for key in ("num", "den"))
    assert equal(b, num)
    assert equal(a, den)


@pytest.mark.parametrize("row", TABLES["impulse_invariance"], ids=lambda row: row["g"])
def test_half_of_a_jump_is_taken_off_by_default(row: dict[str, Any]) -> None:
    """The same pairs with the half-sample correction (Jackson 2000): g[0] is halved and no other sample changes."""
    model = model_of_text(row["g"])
    with working_bits(BITS):
        half = sampled(model, 1 / VALUES["T"], "impulse-invariant").first_samples(12)
        full = sampled(model, 1 / VALUES["T"], "impulse-invariant", first_sample="full").first_samples(12)
        assert overlap(half, [full[0] / 2, *full[1:]])
