"""Sampled -> FloatProgram: nearest singles, what is kept exactly, what is refused, and the steps.

Transposed direct form II: two states a section, and sums whose large terms cancel before small ones are added.
"""

from collections.abc import Callable, Sequence
from math import ldexp
from typing import TYPE_CHECKING

from attrs import field, frozen
from flint import arb, fmpq

from afterkick.errors import Problem, Refused, each
from afterkick.fixed.cascade import delay_problems, delayed, moves
from afterkick.fixed.program import Role, SignalFormat
from afterkick.fixed.quantise import PROBE_BITS, ExactSection, exact_sections
from afterkick.floating.program import (
    FloatCoefficient,
    FloatFlush,
    FloatProduct,
    FloatProgram,
    FloatProgramSection,
    FloatStep,
    FloatSum,
    FloatWord,
)
from afterkick.floating.rounding import (
    LARGEST_EXPONENT,
    MANTISSA_BITS,
    SMALLEST_EXPONENT,
    binary_exponent,
    last_place_exponent,
    nearest_multiple,
    nearest_single,
)
from afterkick.numbers import is_exactly_zero, mid_float, to_text, working_bits

if TYPE_CHECKING:
    from afterkick.design.schema import Signals
    from afterkick.sampling.sampled import Sampled

__all__ = ["float_program"]

ENOUGH_LAST_PLACES = 8
"""A sum below this many last places has fewer than 4 significant bits."""
NEGLIGIBLE_BITS = 48
"""A coefficient too small for a single, and this many bits below the largest of its group, is stored as zero."""
KEY = "arithmetic.kind"
REMEDY = (
    'kind = "fixed" with coefficient_bits = 32, or a delta structure there; else a lower sampling rate (a single keeps '
    "24 bits however wide the core is)"
)
RANGE = f"magnitudes from 2^{SMALLEST_EXPONENT} to just below 2^{LARGEST_EXPONENT + 1}"

Triple = tuple[float, float, float]
Ball = Callable[[], arb]


def float_program(
    sampled: "Sampled",
    signals: "Signals",
    name: str,
    *,
    title: str = "",
    digest: str = "",
    flush_below: fmpq | None = None,
) -> FloatProgram:
    """The filter in singles that realises H from input units to output units, as a cascade in transposed form II.

    ``flush_below``: a section whose states are all below it in magnitude is set to zero, so that no tail is subnormal.

    :raises Refused: with all problems of all sections: coefficients outside the range of normal singles, poles that
        rounding moved across the unit circle or merged with z = 1, a delay that is too long.
    """
    problems = delay_problems(sampled.delay_samples) + _signal_problems(signals) + _flush_problems(flush_below)
    rounded = each(_rounded, exact_sections(sampled), problems)
    threshold = None if flush_below is None else _threshold(flush_below)
    return FloatProgram(
        name=name,
        title=title or name,
        sections=_wired(rounded, sampled.delay_samples, threshold),
        input="x",
        output="y",
        rate_hz=sampled.rate_hz,
        method=sampled.method,
        delay_samples=sampled.delay_samples,
        input_format=SignalFormat(signals.input.unit, signals.input.full_scale, signals.input.peak_or_full_scale),
        output_format=SignalFormat(signals.output.unit, signals.output.full_scale, signals.output.full_scale),
        flush_below=threshold,
        digest=digest,
    )


def _signal_problems(signals: "Signals") -> list[Problem]:
    peak = signals.input.peak_or_full_scale
    if fmpq(2) ** SMALLEST_EXPONENT <= peak < fmpq(2) ** LARGEST_EXPONENT:
        return []
    found = f"a largest input of about {mid_float(arb(peak)):.3g} units"
    return [Problem("signals.input", found, RANGE, "another unit")]


def _flush_problems(flush_below: fmpq | None) -> list[Problem]:
    if flush_below is None or fmpq(2) ** SMALLEST_EXPONENT <= flush_below < 1:
        return []
    found = f"about {mid_float(arb(flush_below)):.3g}"
    accepted = f"from 2^{SMALLEST_EXPONENT} to below 1"
    return [Problem("arithmetic.flush_below", found, accepted, "1e-30 is far below any signal")]


def _threshold(flush_below: fmpq) -> float:
    exponent = binary_exponent(lambda: arb(flush_below), "flush_below")
    assert exponent is not None  # positive
    return nearest_single(lambda: arb(flush_below), max(exponent, SMALLEST_EXPONENT), "flush_below")


@frozen
class _Rounded:
    """One section's singles."""

    exact: ExactSection
    b: Triple
    a: Triple
    coefficients: tuple[FloatCoefficient, ...]
    numerator_scale: str


def _rounded(section: ExactSection) -> _Rounded:
    """The singles of a section.

    Zeros and poles at z = 1 and z = -1 stay there exactly.  Where the numerator's terms don't cancel at z = 1 (a
    low-pass), it takes part in what rounding did to 1 + a1 + a2, so that the DC gain is kept to a rounding.

    :raises Refused: where they lose their meaning.
    """
    denominator = [_coefficient(section, 1, i) for i in (1, 2)]
    a1, a2 = _singles(denominator, section, "a")
    if a2 and section.pole_at_one:
        a1, a2 = _with_pole(denominator, (a1, a2), -1)
    elif a2 and section.pole_at_minus_one:
        a1, a2 = _with_pole(denominator, (a1, a2), 1)
    problems = _denominator_problems(section, a1, a2)
    if problems:
        raise Refused(problems)
    scale = _numerator_scale(section, a1, a2)
    numerator = [_scaled(_coefficient(section, 0, i), scale) for i in range(3)]
    b0, b1, b2 = _singles(numerator, section, "b")
    if section.zero_at_one:
        b0, b1, b2 = _with_zero(numerator, (b0, b1, b2), -1)
    elif section.zero_at_minus_one:
        b0, b1, b2 = _with_zero(numerator, (b0, b1, b2), 1)
    with working_bits(PROBE_BITS):
        rows = zip(("b0", "b1", "b2", "a1", "a2"), (b0, b1, b2, a1, a2), numerator + denominator, strict=True)
        coefficients = tuple(
            FloatCoefficient(name, value, to_text(wanted(), 9), _error_last_places(value, wanted()))
            for name, value, wanted in rows
            if value or not is_exactly_zero(wanted())
        )
        text = "" if scale is None else to_text(scale(), 9)
    return _Rounded(section, (b0, b1, b2), (1.0, a1, a2), coefficients, text)


def _coefficient(section: ExactSection, group: int, index: int) -> Ball:
    return lambda: section.evaluate()[group][index]


def _scaled(compute: Ball, scale: Ball | None) -> Ball:
    return compute if scale is None else lambda: compute() * scale()


def _error_last_places(value: float, wanted: arb) -> float:
    place = last_place_exponent(value) if value else SMALLEST_EXPONENT - MANTISSA_BITS + 1
    return mid_float((arb(value) - wanted) * fmpq(2) ** -place)


def _singles(group: Sequence[Ball], section: ExactSection, letter: str) -> list[float]:
    """The nearest singles of b, or of a1 and a2, whose group holds 1 as well."""
    what = f"a coefficient {letter} of section {section.number}"
    exponents = [binary_exponent(compute, what) for compute in group]
    present = [exponent for exponent in exponents if exponent is not None]
    largest = max([*present, *([0] if letter == "a" else [])], default=0)
    values = []
    for compute, exponent in zip(group, exponents, strict=True):
        if exponent is None or exponent < min(SMALLEST_EXPONENT, largest - NEGLIGIBLE_BITS):
            values.append(0.0)
            continue
        value = nearest_single(compute, exponent, what) if exponent >= SMALLEST_EXPONENT else 0.0
        if not 0 < abs(value) < float("inf"):
            found = f"{what} has a magnitude of about 2^{exponent}"
            remedy = "other units for the input or output, so that the gain between them is nearer to 1"
            raise Refused(Problem(f"{KEY}, section {section.number}", found, RANGE, remedy))
        values.append(value)
    return values


def _with_pole(group: Sequence[Ball], singles: tuple[float, float], sign: int) -> tuple[float, float]:
    """a1 and a2 on one grid, a1 = sign * (1 + a2), so that a pole at z = 1 (sign -1) or -1 (sign 1) stays there.

    Doubles hold the multiples and their sums exactly.
    """
    a1, a2 = singles
    if _exact(a1) == sign * (1 + _exact(a2)):
        return singles
    place = last_place_exponent(max(1.0, abs(a1), abs(a2)))
    while True:
        a2 = nearest_multiple(group[1], place, "a2")
        if _fits(1 + a2, place):
            return sign * (1 + a2), a2
        place += 1


def _with_zero(group: Sequence[Ball], singles: Triple, sign: int) -> Triple:
    """b on one grid, b1 = sign * (b0 + b2), so that a zero at z = 1 (sign -1) or -1 (sign 1) stays there."""
    b0, b1, b2 = singles
    if _exact(b1) == sign * (_exact(b0) + _exact(b2)):
        return singles
    place = last_place_exponent(max(map(abs, singles)))
    while True:
        b0, b2 = (nearest_multiple(group[i], place, f"b{i}") for i in (0, 2))
        if _fits(b0 + b2, place):
            return b0, sign * (b0 + b2), b2
        place += 1


def _fits(value: float, place_exponent: int) -> bool:
    """Whether a multiple of 2^place_exponent is a single."""
    return abs(value) <= ldexp(1.0, MANTISSA_BITS + place_exponent)


def _numerator_scale(section: ExactSection, a1: float, a2: float) -> Ball | None:
    """Stored over exact 1 + a1 + a2; None where the numerator cancels at z = 1, or there is a pole there.

    Without cancellation the section's largest gains are where the denominator is small, near z = 1 if rounding
    matters at all; with it, a scale would only move the error from DC to where the numerator is large.
    """
    stored = _at_one(a1, a2)
    with working_bits(PROBE_BITS):
        b, a = section.evaluate()
        cancels = not 2 * abs(b[0] + b[1] + b[2]) > abs(b[0]) + abs(b[1]) + abs(b[2])
        unchanged = is_exactly_zero(a[0] + a[1] + a[2] - stored)
    if cancels or unchanged or section.pole_at_one:
        return None

    def scale() -> arb:
        _, a = section.evaluate()
        return arb(stored) / (a[0] + a[1] + a[2])

    return scale


def _exact(value: float) -> fmpq:
    return fmpq(*value.as_integer_ratio())


def _at_one(a1: float, a2: float) -> fmpq:
    return 1 + _exact(a1) + _exact(a2)


def _denominator_problems(section: ExactSection, a1: float, a2: float) -> list[Problem]:
    """A pole that rounding took to the other side of the unit circle, or a pole near z = 1 that lost its place.

    The Jury test of order 2, exact in rationals.
    """
    at_one, at_minus_one, inside = _at_one(a1, a2), _at_one(-a1, a2), 1 - _exact(a2)
    stable = (
        (at_one > 0 or (at_one == 0 and section.pole_at_one))
        and (at_minus_one > 0 or (at_minus_one == 0 and section.pole_at_minus_one))
        and (inside > 0 or (inside == 0 and section.pole_pair_on_circle))
    )
    where = f"{KEY}, section {section.number}"
    stored = f"a1 = {a1!r}, a2 = {a2!r}"
    if section.unstable and at_one >= 0 and at_minus_one >= 0 and inside >= 0:
        found = f"no pole is outside the unit circle any more after rounding to {stored}"
        return [Problem(where, found, "an unstable pole that stays one, as the exact filter has it", REMEDY)]
    if not stable and not section.unstable:
        found = f"a pole is on or outside the unit circle after rounding to {stored}"
        return [Problem(where, found, "poles inside the unit circle, as the exact filter has them", REMEDY)]
    places = [last_place_exponent(value) for value in (a1, a2) if value]
    if section.pole_at_one or not places:
        return []
    kept = abs(at_one) * fmpq(2) ** -max(places)
    if kept < ENOUGH_LAST_PLACES:
        bits = int(kept.floor()).bit_length()
        found = f"1 + a1 + a2 keeps {bits} significant bits after rounding to {stored}"
        return [Problem(where, found, "at least 4 significant bits", REMEDY)]
    return []


def _wired(rounded: Sequence[_Rounded], delay_samples: int, threshold: float | None) -> tuple[FloatProgramSection, ...]:
    """The words and steps of all sections, and how they hang together."""
    count = len(rounded)
    signals = ["x", *(f"v{k}" for k in range(1, count)), "y"]
    sections = []
    for k, section in enumerate(rounded):
        source = delayed("x", delay_samples) if k == 0 else signals[k]
        wiring = _Wiring(source, signals[k + 1], k + 1)
        steps = wiring.steps(section.b, section.a)
        if threshold is not None and wiring.states:
            steps.append(FloatFlush(tuple(wiring.states), threshold))
        words = [FloatWord(signals[k + 1], Role.OUTPUT if k == count - 1 else Role.TEMPORARY)]
        words += [FloatWord(state, Role.STATE) for state in wiring.states]
        if k == 0:
            past = [FloatWord(delayed("x", i), Role.STATE) for i in range(1, delay_samples + 1)]
            words = [FloatWord("x", Role.INPUT), *past, *words]
            steps += moves("x", delay_samples)
        sections.append(
            FloatProgramSection(
                words=tuple(words),
                steps=tuple(steps),
                source=source,
                dest=signals[k + 1],
                b=section.b,
                a=section.a,
                coefficients=section.coefficients,
                numerator_scale=section.numerator_scale,
                marginal=section.exact.marginal,
            )
        )
    return tuple(sections)


@frozen
class _Wiring:
    """The steps of one section; factors 0, 1 and -1 cost nothing, and equal factors of one word are multiplied once."""

    source: str
    dest: str
    number: int
    states: list[str] = field(init=False, factory=list)
    made: dict[tuple[float, str], tuple[int, str]] = field(init=False, factory=dict)

    def steps(self, b: Triple, a: Triple) -> list[FloatStep]:
        """y = b0 x + s1, then s1 = s2 - a1 y + b1 x and s2 = b2 x - a2 y."""
        products: list[FloatStep] = []
        from_x = [self._term(products, f"b{i}", b[i], self.source, 1) for i in range(3)]
        feedback: list[FloatStep] = []
        from_y = [self._term(feedback, f"a{i}", a[i], self.dest, -1) for i in (1, 2)]
        first, second = (f"s{self.number}_{i}" for i in (1, 2))
        late = (*from_x[2], *from_y[1])
        # -a1 y and the second state nearly cancel where poles are near z = 1: first, so that little is rounded off b1 x
        middle = ((1, second), *from_y[0], *from_x[1]) if late else (*from_x[1], *from_y[0])
        now = (*from_x[0], *(((1, first),) if middle else ()))
        self.states.extend([first, second] if late else [first] if middle else [])
        sums = [FloatSum(state, terms) for state, terms in ((first, middle), (second, late)) if terms]
        return [*products, FloatSum(self.dest, now), *feedback, *sums]

    def _term(
        self, steps: list[FloatStep], label: str, factor: float, word: str, sign: int
    ) -> tuple[tuple[int, str], ...]:
        """``sign * factor * word`` as at most one signed word, with the product among ``steps`` where one is needed."""
        if not factor:
            return ()
        side = 1 if factor > 0 else -1
        if abs(factor) == 1:
            return ((sign * side, word),)
        key = (abs(factor), word)
        if key not in self.made:
            product = f"{label}_{word}"
            steps.append(FloatProduct(product, factor, word, label))
            self.made[key] = (side, product)
        made_side, product = self.made[key]
        return ((sign * side * made_side, product),)
