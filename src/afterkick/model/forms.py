"""The five forms of the design file, each turned into one Model."""

from collections.abc import Sequence

from flint import fmpq, fmpq_mat, fmpq_poly

from afterkick.design.schema import BlocksForm, Design, MatricesForm, OdeForm, RatioForm, RootsForm
from afterkick.errors import Problem, Refused
from afterkick.model.blocks import block_factors
from afterkick.model.factors import Factors, Gain, from_polynomials, product
from afterkick.model.model import Model, build
from afterkick.model.roots import RADIANS, Roots, algebraic_roots, count, merged

__all__ = ["model_of", "polynomial"]


def polynomial(highest_first: Sequence[fmpq]) -> fmpq_poly:
    """The polynomial with these coefficients, highest power first."""
    return fmpq_poly(list(reversed(highest_first)))


def model_of(design: Design) -> Model:
    """The continuous model of a design.

    :raises Refused: what the form can't be turned into, naming the key.
    """
    form = design.model
    match form:
        case OdeForm():
            denominator = polynomial(form.output)
            factors = _ratio(polynomial(form.input), denominator, "model.input")
            return build(factors, form.before, denominator)
        case RatioForm():
            return build(_ratio(polynomial(form.numerator), polynomial(form.denominator), "model.numerator"))
        case RootsForm():
            return build(_roots(form))
        case MatricesForm():
            return build(_matrices(form))
        case BlocksForm():
            return build(product(block_factors(block) for block in form.block))


def _ratio(numerator: fmpq_poly, denominator: fmpq_poly, where: str) -> Factors:
    if numerator.is_zero():
        raise Refused(
            Problem(where, "a transfer function that is zero", "at least one coefficient that is not zero", "")
        )
    return from_polynomials(numerator, denominator, RADIANS)


def _roots(form: RootsForm) -> Factors:
    zeros = _listed(form.zeros, form.unit)
    poles = _listed(form.poles, form.unit)
    excess = count(poles) - count(zeros)
    dc_gain = form.gain if excess == 0 or form.unit == RADIANS else None
    for listed, power in ((form.zeros, 1), (form.poles, -1)):
        for re, im in listed:
            size = re * re + im * im if im != 0 else -re
            if dc_gain is not None:
                dc_gain = None if size == 0 else dc_gain * size**power
    return Factors(zeros, poles, Gain(form.gain), dc_gain)


def _listed(roots: Sequence[tuple[fmpq, fmpq]], unit: str) -> Roots:
    return merged(
        algebraic_roots(fmpq_poly([re * re + im * im, -2 * re, 1]) if im != 0 else fmpq_poly([-re, 1]), unit)
        for re, im in roots
    )


def _matrices(form: MatricesForm) -> Factors:
    """H = d + c (sI - A)^-1 b = (d p(A) + p(A - b c) - p(A)) / p(A), p the characteristic polynomial (matrix
    determinant lemma); exact."""
    order = len(form.a)
    a = fmpq_mat(order, order, [value for row in form.a for value in row])
    b = fmpq_mat(order, 1, list(form.b))
    c = fmpq_mat(1, order, list(form.c))
    denominator = a.charpoly()
    numerator = (a - b * c).charpoly() - denominator + form.d * denominator
    return _ratio(numerator, denominator, "model")
