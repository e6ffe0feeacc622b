"""The coupled structure: a cascade whose conjugate pole pairs turn and shrink a vector of two states.

With the poles r +- i q a section is

    w = d x + s1;  s1' = r s1 - q s2 + p1 x;  s2' = q s1 + r s2 + p2 x

r and q lie on a uniform grid, so the poles do too, unlike those of the direct form, which are sparse near z = 1.  Zeros
at z = 1 and z = -1 are kept exactly, by a section of their own in front, without poles and without rounding.  Other
zeros are as near as the last places of d, p1 and p2 bring them, and so is the gain at z = 1.  Real poles have no turn:
their sections are those of the delta structure.
"""

from collections.abc import Iterable
from fractions import Fraction
from typing import TYPE_CHECKING, cast

from attrs import evolve, frozen
from flint import arb, ctx, fmpq

from afterkick.errors import Problem, Refused
from afterkick.fixed.binary_points import (
    ONE,
    ZERO,
    Scaled,
    nearest,
    over_power_of_two,
    rounded,
)
from afterkick.fixed.cascade import SCALING_BITS, bits_of, delay_problems, finished, scaled, unsupported
from afterkick.fixed.delta_core import delta_core
from afterkick.fixed.program import Coefficient, Move, Program, Role
from afterkick.fixed.quantise import (
    ENOUGH_LAST_PLACES,
    KEY,
    PROBE_BITS,
    ExactSection,
    denominator_problems,
    exact_sections,
)
from afterkick.fixed.scaling import FloatSection
from afterkick.fixed.wide import (
    LEAST_COEFFICIENT_BITS,
    Core,
    Frame,
    Sheet,
    ball_floats,
    wide_cascade,
)
from afterkick.numbers import is_exactly_zero, mid_float, round_to_integer, to_text, working_bits
from afterkick.sampling.sections import Section

if TYPE_CHECKING:
    from afterkick.design.schema import Arithmetic, Signals
    from afterkick.sampling.sampled import Sampled

__all__ = ["coupled_program"]

ZEROS = {
    "at one": (1, -1, 0),
    "at minus one": (1, 1, 0),
    "at both": (1, 0, -1),
    "twice at one": (1, -2, 1),
    "twice at minus one": (1, 2, 1),
}
"""Zeros that are kept exactly, as polynomials in 1/z."""
FRACTION_WITHOUT_NORM = 12
"""Stands in for log2 of the norm of a rounding error that never decays."""


def coupled_program(
    sampled: "Sampled", arithmetic: "Arithmetic", signals: "Signals", name: str, *, title: str = "", digest: str = ""
) -> Program:
    """The integer filter that realises H * (input full scale / output full scale) in coupled form.

    :raises Refused: with all problems of all sections: a pole pair on the unit circle, a coefficient that lost its
        meaning, words or sums that are too narrow, a delay that is too long, or an option that this structure doesn't
        know.
    """
    problems = unsupported(arithmetic) + delay_problems(sampled.delay_samples)
    if problems:
        raise Refused(problems)
    sections, exponents = scaled(exact_sections(cast("Sampled", _Split(sampled))), arithmetic.scaling, signals)
    peak = signals.input.peak_or_full_scale / signals.input.full_scale
    wired = wide_cascade(_core, sections, exponents, arithmetic, peak, sampled.delay_samples)
    return finished(wired, "coupled", sampled, arithmetic, signals, name, title=title, digest=digest)


class _Split:
    """The sampled filter with the zeros that are kept exactly in sections of their own, in front of their poles."""

    def __init__(self, sampled: "Sampled") -> None:
        self.sampled = sampled
        self.marginal = sampled.marginal
        self.parts = tuple(part for section in exact_sections(sampled) for part in _parts(section, sampled))

    def sections(self, bits: int) -> tuple[Section, ...]:
        """As those of the sampled filter."""
        whole = self.sampled.sections(bits)
        with working_bits(max(bits, ctx.prec)):
            return tuple(part.of(whole[part.index]) for part in self.parts)


@frozen
class _Part:
    """A whole section, or what is made of it."""

    index: int
    """Of the section, from 0."""
    zeros: str = ""
    """Those that are split off: a key of ZEROS, or none."""
    front: bool = False
    """Whether this is the section of these zeros, not that of the poles."""
    turns: bool = False
    """Whether the poles are a conjugate pair."""

    def of(self, whole: Section) -> Section:
        """At the present working precision."""
        if not self.zeros:
            return whole
        b0, _, b2 = whole.b
        one, none = arb(1), arb(0)
        if self.front:
            _, first, second = (arb(value) for value in ZEROS[self.zeros])
            return Section((one, first, second), (one, none, none))
        rest = {"at one": -b2, "at minus one": b2}.get(self.zeros, none)
        return Section((b0, rest, none), whole.a, a_at_one=whole.a_at_one)


def _parts(section: ExactSection, sampled: "Sampled") -> tuple[_Part, ...]:
    index = section.number - 1
    with working_bits(PROBE_BITS):
        exact = sampled.sections(PROBE_BITS)[index]
        (b0, _, b2), (_, a1, a2) = exact.b, exact.a
        if exact.order == 1 or not a1 * a1 < 4 * a2:
            return (_Part(index),)
        twice = not b0.contains(0) and (b2 - b0).contains(0)
    zeros = ""
    if section.zero_at_one and section.zero_at_minus_one:
        zeros = "at both"
    elif section.zero_at_one:
        zeros = "twice at one" if twice else "at one"
    elif section.zero_at_minus_one:
        zeros = "twice at minus one" if twice else "at minus one"
    rest = _Part(index, zeros, False, True)
    return (_Part(index, zeros, True), rest) if zeros else (rest,)


def _core(section: ExactSection, frame: Frame) -> Core:
    split = cast(_Split, section.sampled)
    part = split.parts[section.number - 1]
    if part.front:
        return _zeros(section, frame)
    return _turning(section, frame) if part.turns else delta_core(section, frame)


def _zeros(section: ExactSection, frame: Frame) -> Core:
    """The present and the past inputs, without any rounding."""
    number = section.number
    zeros = ZEROS[cast(_Split, section.sampled).parts[number - 1].zeros]
    # the scaling is a power of two
    scaling = int(section.gain.numerator).bit_length() - int(section.gain.denominator).bit_length()
    factors = [Scaled(value, -scaling) for value in zeros]
    past = [f"h{number}a", f"h{number}b"][: 2 if factors[2].integer else 1]
    inner, wide = frame.source_fraction_bits, f"w{number}"
    sheet = Sheet(frame, [(name, frame.source_bits, inner) for name in past])
    read = zip(factors, (frame.source, *past), ("b0", "b1", "b2"), strict=False)
    finest = inner + max(factor.fraction_bits for factor in factors if factor.integer)
    if not sheet.temporary(wide, list(read), max(finest, 0)):
        raise frame.too_narrow(number, frame.source_bits)
    first = len(sheet.sums)
    b, b_bits = over_power_of_two(*(factor.value for factor in factors))
    rows = zip(("b0", "b1", "b2"), (arb(value * section.gain) for value in zeros), factors, strict=True)
    return Core(
        tuple(
            evolve(word, fraction_bits=frame.source_place + inner) if word.role is Role.STATE else word
            for word in sheet.words
        ),
        (
            *sheet.sums,
            *(Move(dest, source) for dest, source in reversed(list(zip(past, (frame.source, *past), strict=False)))),
        ),
        first,
        wide,
        bits_of(sheet.ranges[wide]),
        sheet.fractions[wide],
        b,
        b_bits,
        (1, 0, 0),
        0,
        _coefficients(rows),
    )


@frozen
class _Numbers:
    """The exact numbers of a turning section at one working precision."""

    r: arb
    q: arb
    d: arb
    p1: arb
    p2: arb
    a: tuple[arb, ...]

    @classmethod
    def of(cls, section: ExactSection) -> "_Numbers":
        """At the present working precision."""
        (b0, b1, b2), a = section.evaluate()
        r = -a[1] / 2
        q = (a[2] - r * r).sqrt()
        p1 = b1 - b0 * a[1]
        return cls(r, q, b0, p1, -(b2 - b0 * a[2] + p1 * r) / q, a)


def _turning(section: ExactSection, frame: Frame) -> Core:
    number = section.number
    if section.pole_pair_on_circle:
        raise Refused(
            Problem(
                f"arithmetic.structure, section {number}",
                "a pole pair on the unit circle, which no grid of turns keeps there",
                "poles inside the unit circle",
                'structure = "delta" or "direct", which keep it exactly',
            )
        )
    with working_bits(SCALING_BITS):
        exact = _Numbers.of(section)
        none = arb(0)
        r, q = mid_float(exact.r), mid_float(exact.q)
        tail = (mid_float(exact.a[1]), mid_float(exact.a[2]))
        errors: tuple[FloatSection | int, ...] = (
            FloatSection((0.0, 1.0, -r), tail, 0),
            FloatSection((0.0, 0.0, q), tail, 0),
        )
        shapes: tuple[FloatSection | int, ...] = (
            ball_floats((none, exact.p1, -(exact.p1 * exact.r + exact.p2 * exact.q)), exact.a),
            ball_floats((none, exact.p2, exact.q * exact.p1 - exact.r * exact.p2), exact.a),
        )
        if section.unstable:
            errors, shapes = (FRACTION_WITHOUT_NORM, FRACTION_WITHOUT_NORM), (1, 1)
    reaches = frame.reaches(shapes)
    finest = max(frame.fraction_bits(errors))
    fractions = frame.within(number, (finest, finest), reaches, (True, True))
    fractions = (min(fractions), min(fractions))
    for bits in range(frame.builder.coefficient_bits, LEAST_COEFFICIENT_BITS - 1, -1):
        core = _attempt(section, frame, fractions, reaches, bits)
        if core is not None:
            return core
    raise frame.too_narrow(number, max(frame.widths(fractions, reaches)))


def _attempt(
    section: ExactSection, frame: Frame, fractions: tuple[int, int], reaches: tuple[int, ...], bits: int
) -> Core | None:
    """With coefficients of so many bits; None where a sum is too wide for the accumulator."""
    number, what = section.number, f"section {section.number}"
    grid = bits - 1
    turn = [_on_grid(section, name, grid) for name in "rq"]
    while max(map(abs, turn)) > 1 << (bits - 1):
        grid -= 1
        turn = [_on_grid(section, name, grid) for name in "rq"]
    one, (along, across) = 1 << grid, turn
    a, a_bits = (one * one, -2 * along * one, along * along + across * across), 2 * grid
    if across < ENOUGH_LAST_PLACES:
        found = f"the turn of the pole pair keeps {across.bit_length()} significant bits ({across} in 2^-{grid})"
        remedy = "wider coefficients; else the delta structure; else a lower sampling rate"
        raise Refused(Problem(f"{KEY}, {what}", found, "at least 4 significant bits", remedy))
    problems = denominator_problems(section, a, a_bits)
    if problems:
        raise Refused(problems)
    r, q = Scaled(along, grid), Scaled(across, grid)
    d, p1 = (
        ZERO if value.contains(0) else rounded(lambda: getattr(_Numbers.of(section), name), bits, what)  # noqa: B023
        for name, value in _probed(section)
    )
    # p2 comes last: it brings the gain at z = 1 as near as it can
    at_one = Fraction(a[0] + a[1] + a[2], a[0])
    wanted = (d.value * at_one + p1.value * (1 - r.value) - _gain_at_one(section) * at_one) / q.value
    p2 = nearest(wanted, bits) if wanted else ZERO
    b = over_power_of_two(
        d.value,
        p1.value - 2 * r.value * d.value,
        d.value * (r.value**2 + q.value**2) - p1.value * r.value - p2.value * q.value,
    )
    states, turned = [f"s{number}a", f"s{number}b"], [f"r{number}a", f"r{number}b"]
    sheet = Sheet(frame, list(zip(states, frame.widths(fractions, reaches), fractions, strict=True)))
    wide = states[0]
    if d.integer:
        wide = f"w{number}"
        if not sheet.temporary(wide, [(ONE, states[0], ""), (d, frame.source, "d")], fractions[0]):
            return None
    first = len(sheet.sums)
    ahead = [(r, states[0], "r"), (Scaled(-across, grid), states[1], "q"), (p1, frame.source, "p1")]
    aside = [(q, states[0], "q"), (r, states[1], "r"), (p2, frame.source, "p2")]
    if not (sheet.temporary(turned[0], ahead, fractions[0]) and sheet.temporary(turned[1], aside, fractions[1])):
        return None
    if not all(sheet.state(state, (new,)) for state, new in zip(states, turned, strict=True)):
        return None
    with working_bits(SCALING_BITS):
        exact = _Numbers.of(section)
        rows = zip(
            ("d", "p1", "p2", "r", "q"),
            (exact.d, exact.p1, exact.p2, exact.r, exact.q),
            (d, p1, p2, r, q),
            strict=True,
        )
        coefficients = _coefficients(rows)
    return sheet.core(first, wide, (*b, a, a_bits), coefficients)


def _on_grid(section: ExactSection, name: str, grid: int) -> int:
    power = fmpq(2) ** grid
    return round_to_integer(lambda: getattr(_Numbers.of(section), name) * power, f"section {section.number}")


def _probed(section: ExactSection) -> tuple[tuple[str, arb], ...]:
    with working_bits(PROBE_BITS):
        exact = _Numbers.of(section)
        return ("d", exact.d), ("p1", exact.p1)


def _gain_at_one(section: ExactSection) -> Fraction:
    with working_bits(PROBE_BITS):
        whole = section.sampled.sections(PROBE_BITS)[section.number - 1]
        mantissa, exponent = (whole.b_at_one * section.gain / whole.a_at_one).mid().man_exp()
        return int(mantissa) * Fraction(2) ** int(exponent)


def _coefficients(rows: Iterable[tuple[str, arb, Scaled]]) -> tuple[Coefficient, ...]:
    return tuple(
        Coefficient(
            name,
            stored.integer,
            stored.fraction_bits,
            to_text(exact, 9),
            mid_float(stored.integer - exact * fmpq(2) ** stored.fraction_bits),
        )
        for name, exact, stored in rows
        if stored.integer or not is_exactly_zero(exact)
    )
