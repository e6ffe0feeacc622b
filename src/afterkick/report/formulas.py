"""Closed forms and numbers as a reader would write them."""

from collections.abc import Sequence
from math import isfinite

from flint import arb, fmpq

from afterkick.model.partial_fractions import Mode
from afterkick.numbers import fraction, mid_float, to_text

__all__ = ["ball_text", "closed_form", "counted", "exact_text", "number"]


_LONGEST_NUMBER = 24
"""Characters; only an exponent of many digits takes more."""


def number(value: float, digits: int = 6) -> str:
    """A float in as few characters as its digits allow."""
    return f"{value + 0.0:.{digits}g}"  # -0.0 + 0.0 is 0.0


def ball_text(value: arb, digits: int = 6) -> str:
    """A ball's midpoint, also where no float can hold it."""
    middle = mid_float(value)
    if isfinite(middle) and (middle != 0.0 or bool(value.mid().is_zero())):
        return number(middle, digits)
    text = to_text(value, digits)
    if len(text) <= _LONGEST_NUMBER:
        return text
    return "almost 0" if middle == 0.0 else "beyond any range"


def exact_text(value: fmpq) -> str:
    """A rational as an integer, a short exact decimal, or else six digits."""
    exact = fraction(value)
    if exact.denominator == 1 and abs(exact.numerator) < 10**9:
        return str(exact.numerator)
    text = repr(float(exact))
    return text if len(text) <= 12 and fmpq(*float(text).as_integer_ratio()) == value else number(float(exact))


def closed_form(modes: Sequence[Mode], dirac: arb, variable: str = "t") -> str:
    """sum of t^j e^(-at) (A cos wt + B sin wt), six digits; the Dirac part first."""
    terms = [] if dirac.is_zero() else [f"{ball_text(dirac)} δ({variable})"]
    for mode in modes:
        factorial = 1
        for j, coefficient in enumerate(mode.coefficients):
            factorial *= max(j, 1)
            terms += _mode_terms(mode, j, coefficient.real / factorial, coefficient.imag / factorial, variable)
    return " + ".join(terms).replace("+ -", "- ") if terms else "0"


def _mode_terms(mode: Mode, power: int, re: arb, im: arb, variable: str) -> list[str]:
    decay = "" if mode.pole.real.is_zero() else f"e^({ball_text(mode.pole.real)} {variable})"
    growth = "" if power == 0 else variable if power == 1 else f"{variable}^{power}"
    if mode.real:
        factors = [(re, "")]
    else:
        turn = f"{ball_text(mode.pole.imag)} {variable}"
        factors = [(2 * re, f"cos({turn})"), (-2 * im, f"sin({turn})")]
    return [
        " ".join(part for part in (ball_text(amplitude), growth, decay, wave) if part)
        for amplitude, wave in factors
        if not amplitude.contains(0)
    ]


def counted(number_of: int, noun: str) -> str:
    """1 sample, 2 samples."""
    return f"{number_of} {noun}" if number_of == 1 else f"{number_of} {noun}s"
