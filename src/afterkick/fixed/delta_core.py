"""One section in delta form: its coefficients as integers, its states, and the steps that bring it on by a sample.

w = b0 x + s1;  s1' = s1 + n1 x - c1 w + s2;  s2' = s2 + n2 x - c2 w

with c1 = 2 + a1, c2 = 1 + a1 + a2, n1 = b1 + 2 b0, n2 = b0 + b1 + b2; of order 1 with c1 = 1 + a1, n1 = b0 + b1 and no
s2.  Each number has a binary point of its own, and so has each state.
"""

import math
from fractions import Fraction
from itertools import product
from typing import TYPE_CHECKING

from attrs import frozen
from flint import arb, ctx, fmpq

from afterkick.errors import Problem, Refused
from afterkick.fixed.binary_points import (
    ONE,
    ZERO,
    Scaled,
    floor_log2,
    nearest,
    over_power_of_two,
    rounded,
    simplest,
)
from afterkick.fixed.cascade import SCALING_BITS, bits_of
from afterkick.fixed.program import Coefficient, Sum
from afterkick.fixed.quantise import PROBE_BITS, ExactSection, Triple, denominator_problems
from afterkick.fixed.ranges import Interval
from afterkick.fixed.scaling import FloatSection
from afterkick.fixed.wide import (
    LEAST_COEFFICIENT_BITS,
    MOST_STATE_BITS,
    Core,
    Frame,
    Sheet,
    Weighed,
    ball_floats,
    endless_at,
)
from afterkick.numbers import is_exactly_zero, mid_float, to_text, working_bits

if TYPE_CHECKING:
    from afterkick.sampling.sampled import Section

__all__ = ["Numbers", "delta_core", "slope"]

WITHOUT_NORM = 4
"""Fraction bits beyond log2 of a time constant where a rounding error never decays."""
HELD = -1
"""log2 of what a state that a clamp holds within its data word needs above that, less the spare bit of others."""
SEARCHED = 16
"""Last places of c that are searched for the best ratio n : c, as far as this is 2^-10 of c at most."""


@frozen
class Numbers:
    """The exact numbers of a section at one working precision."""

    n: tuple[arb, ...]
    """b0, n1 and, of order 2, n2."""
    c: tuple[arb, ...]
    """c1 and, of order 2, c2."""
    a: tuple[arb, ...]
    b: tuple[arb, ...]

    @classmethod
    def of(cls, section: ExactSection) -> "Numbers":
        """At the present working precision."""
        exact: Section = section.sampled.sections(ctx.prec)[section.number - 1]
        b0, b1, b2 = (value * section.gain for value in exact.b)
        at_one = exact.b_at_one * section.gain
        if exact.order == 1:
            return cls((b0, at_one), (exact.a_at_one,), exact.a, (b0, b1, b2))
        return cls((b0, b1 + 2 * b0, at_one), (2 + exact.a[1], exact.a_at_one), exact.a, (b0, b1, b2))


@frozen
class Integers:
    """The coefficients of a section."""

    n: tuple[Scaled, ...]
    c: tuple[Scaled, ...]
    sum_of_others: bool
    """Whether n1 is not an integer of its own but 2 b0 + n2/2: a zero at z = -1."""
    gain: tuple[Scaled, ...] = ()
    """Parts of the gain at z = 1, where the last n is not an integer of its own but gain * c."""

    @property
    def transfer(self) -> tuple[Triple, int, Triple, int]:
        """b and a as the integers realise them, exact, with their fraction bits."""
        n0, n1, *n2 = (number.value for number in self.n)
        c1, *c2 = (number.value for number in self.c)
        b = (n0, n1 - 2 * n0, n2[0] - n1 + n0) if n2 else (n0, n1 - n0, Fraction(0))
        a = (Fraction(1), c1 - 2, 1 - c1 + c2[0]) if c2 else (Fraction(1), c1 - 1, Fraction(0))
        return (*over_power_of_two(*b), *over_power_of_two(*a))


def delta_core(section: ExactSection, frame: Frame, gain: tuple[Scaled, ...] = ()) -> Core:
    """The section with the longest coefficients whose sums fit the accumulator.

    With ``gain``, whose sum is the gain at z = 1 of a section with b0 = 0, the last state takes c (gain x - w) instead
    of n x - c w.

    :raises Refused: where a coefficient loses its meaning, or words or sums are too narrow.
    """
    fractions, reaches = frame.fraction_bits(_errors(section)), frame.reaches(_shapes(section, frame))
    fractions = frame.within(section.number, fractions, reaches, [i == 0 for i in range(len(fractions))])
    lengths = range(frame.builder.coefficient_bits, LEAST_COEFFICIENT_BITS - 1, -1)
    for bits, faint in product(lengths, range(1 if gain else 3)):
        integers = _integers(section, bits, faint, gain)
        exact = _exact_integrator(frame, integers, fractions, reaches)
        core = _core(section, frame, integers, exact, reaches)
        if core is not None:
            # in last places of the coefficient that 1 + a1 + a2 is: the fraction may be a shorter one
            spare = max(integers.c[-1].fraction_bits - core.a_bits, 0)
            one, a1, a2 = (value << spare for value in core.a)
            problems = denominator_problems(section, (one, a1, a2), core.a_bits + spare)
            if problems:
                raise Refused(problems)
            return core
    raise frame.too_narrow(section.number, max(frame.widths(fractions, reaches)))


def _errors(section: ExactSection) -> tuple[FloatSection | int, ...]:
    """The response of the output to a rounding of each state; where it does not decay a stand-in for its norm."""
    with working_bits(SCALING_BITS):
        exact = Numbers.of(section)
        a1, a2 = mid_float(exact.a[1]), mid_float(exact.a[2])
    if section.pole_at_one:
        # the last state adds up its input; the zero of the first one's error at z = 1 meets the pole
        alone = FloatSection((0.0, 1.0, 0.0), (-a2, 0.0), 0)
        return (0,) if len(exact.c) == 1 else (alone if abs(a2) < 1 else WITHOUT_NORM, 0)
    if endless_at(section):
        slowness = math.ceil(-math.log2(slope(exact)))
        return tuple(order * slowness + WITHOUT_NORM for order in range(1, len(exact.c) + 1))
    if len(exact.c) == 1:
        return (FloatSection((0.0, 1.0, 0.0), (a1, a2), 0),)
    return FloatSection((0.0, 1.0, -1.0), (a1, a2), 0), FloatSection((0.0, 0.0, 1.0), (a1, a2), 0)


def slope(exact: Numbers) -> float:
    """How much the output changes by in a sample at most, as a part of itself; never zero."""
    return max(abs(mid_float(exact.c[0])), math.sqrt(abs(mid_float(exact.c[-1]))), 2.0**-40)


def _shapes(section: ExactSection, frame: Frame) -> tuple[FloatSection | int, ...]:
    """The response of each state to the section's input; where it does not decay, to the output's full scale."""
    with working_bits(SCALING_BITS):
        exact = Numbers.of(section)
        (b0, b1, b2), (_, a1, a2) = exact.b, exact.a
        if endless_at(section):
            no_slope = all(c.contains(0) for c in exact.c)
            first_reach = HELD if section.pole_at_one and frame.limits is not None else 1
            return (first_reach, 1 if no_slope else 1 + math.ceil(math.log2(slope(exact))))[: len(exact.c)]
        first = ball_floats((arb(0), b1 - b0 * a1, b2 - b0 * a2), exact.a)
        if len(exact.c) == 1:
            return (first,)
        n2, c2 = exact.n[2], exact.c[1]
        return first, ball_floats((arb(0), n2 - c2 * b0, c2 * b2 - n2 * a2), exact.a)


def _exact_integrator(
    frame: Frame, integers: Integers, fractions: tuple[int, ...], reaches: tuple[int, ...]
) -> tuple[int, ...]:
    """With a pole at z = 1 the last state adds up its input: without any rounding, where it may be so wide."""
    finest = min(integers.n[-1].fraction_bits + frame.source_fraction_bits, frame.most_fraction_bits)
    if frame.state_bits is not None or integers.c[-1].integer or not integers.n[-1].integer:
        return fractions
    room = MOST_STATE_BITS - frame.widths((*fractions[:-1], 0), reaches)[-1]
    return (*fractions[:-1], max(fractions[-1], min(finest, room)))


def _integers(section: ExactSection, bits: int, faint: int, gain: tuple[Scaled, ...]) -> Integers:
    """The coefficients in words of ``bits`` bits, with what the exact section has of exact relations between them.

    ``faint`` gives up last places that the impulse response does not see: 1 those of n1, 2 those of n2 too, and with
    them the exact gain at z = 1.
    """
    with working_bits(PROBE_BITS):
        exact = Numbers.of(section)
        b0, _, b2 = exact.b
        zero_n = [bool(value.contains(0)) for value in exact.n]
        zero_c = [bool(value.contains(0)) for value in exact.c]
        order = len(exact.c)
        pair_of_zeros = order == 2 and bool((b2 - b0).contains(0)) and not zero_n[0]

    def stored(group: str, index: int, most: int | None = None) -> Scaled:
        if (zero_n if group == "n" else zero_c)[index]:
            return ZERO
        return rounded(lambda: getattr(Numbers.of(section), group)[index], bits, f"section {section.number}", most)

    finest = _finest(exact, bits)
    last_n, last_c = stored("n", order, finest[order] if faint == 2 else None), stored("c", order - 1)
    if gain:
        # one of a sum: its zeros are nobody's zeros
        (integer, *_), fraction_bits = over_power_of_two(
            sum((part.value for part in gain), Fraction(0)) * last_c.value, Fraction(0), Fraction(0)
        )
        last_n = Scaled(integer, fraction_bits)
        others = [] if order == 1 else [stored("n", 1)]
        return Integers((ZERO, *others, last_n), tuple([stored("c", 0), last_c][-order:]), False, gain)
    if last_n.integer and last_c.integer and faint < 2:
        last_n, last_c = _best_ratio(section, last_c, bits)
    first_n = stored("n", 0)
    if order == 1:
        # a zero at z = -1: n1 = 2 b0
        if section.zero_at_minus_one and first_n.integer:
            first_n = Scaled(last_n.integer, last_n.fraction_bits + 1)
        return Integers((first_n, last_n), (last_c,), False)
    c = (last_c if section.pole_pair_on_circle else stored("c", 0), last_c)
    if pair_of_zeros and section.zero_at_minus_one and last_n.integer:
        # both zeros at z = -1: n1 = n2 = 4 b0
        return Integers((Scaled(last_n.integer, last_n.fraction_bits + 2), last_n, last_n), c, False)
    if section.zero_at_minus_one:
        middle = 2 * first_n.value + last_n.value / 2
        (integer, *_), fraction_bits = over_power_of_two(middle, Fraction(0), Fraction(0))
        whole = Scaled(integer, fraction_bits)
        return Integers((first_n, whole, last_n), c, bool(first_n.integer and last_n.integer))
    if pair_of_zeros:
        return Integers((first_n, last_n, last_n), c, False)
    return Integers((first_n, stored("n", 1, finest[1] if faint else None), last_n), c, False)


def _finest(exact: Numbers, bits: int) -> list[int]:
    """Fraction bits of each n beyond which a last place is lost beside what the others do to the impulse response."""
    rate = slope(exact)
    sizes = [number / rate**i for i, number in enumerate(exact.n)]
    largest = max((floor_log2(size) for size in sizes if not size.contains(0)), default=0)
    return [bits + 1 - largest - math.floor(i * math.log2(rate)) for i in range(len(sizes))]


def _best_ratio(section: ExactSection, start: Scaled, bits: int) -> tuple[Scaled, Scaled]:
    """n and c, the last of their kind, with the gain n : c nearest to the exact one; of equals the nearest c."""
    gain = _gain_at_one(section)
    limit = 1 << (bits - 1)
    window = min(SEARCHED, limit >> 10)
    best: tuple[Fraction, int, Scaled, Scaled] | None = None
    for distance in range(-window, window + 1):
        c = Scaled(start.integer + distance, start.fraction_bits)
        if not 0 < abs(c.integer) <= limit:
            continue
        n = nearest(gain * c.value, bits)
        key = (abs(n.value / c.value - gain), abs(distance))
        if best is None or key < best[:2]:
            best = (*key, n, c)
    assert best is not None
    return best[2], best[3]


def _gain_at_one(section: ExactSection) -> Fraction:
    """n : c of the exact section: the simplest rational that its ball holds, else the ball's middle."""
    with working_bits(PROBE_BITS):
        exact = Numbers.of(section)
        return simplest(exact.n[-1] / exact.c[-1])


def _core(
    section: ExactSection, frame: Frame, integers: Integers, fractions: tuple[int, ...], reaches: tuple[int, ...]
) -> Core | None:
    """The words and steps; None where a sum is too wide for the accumulator."""
    number, order = section.number, len(fractions)
    states = [f"s{number}{letter}" for letter in "ab"[:order]]
    differences = [f"d{number}{letter}" for letter in "ab"[:order]]
    sheet = Sheet(frame, list(zip(states, frame.widths(fractions, reaches), fractions, strict=True)))
    direct, wide = integers.n[0], f"w{number}"
    if direct.integer:
        if not sheet.temporary(wide, [(ONE, states[0], ""), (direct, frame.source, "b0")], fractions[0]):
            return None
    else:
        wide = states[0]
    first = len(sheet.sums)
    if integers.gain:
        weighed: list[Weighed] = [(part, frame.source, "gain") for part in integers.gain]
        weighed.append((Scaled(-1, 0), wide, ""))
        if not sheet.temporary(f"e{number}", weighed, fractions[0]):
            return None
    for i in range(order):
        driving: list[Weighed] = [(integers.n[i + 1], frame.source, f"beta{i + 1}")]
        if i == 0 and integers.sum_of_others:
            n2 = integers.n[2]
            driving = [
                (Scaled(direct.integer, direct.fraction_bits - 1), frame.source, "b0"),
                (Scaled(n2.integer, n2.fraction_bits + 1), frame.source, "beta2"),
            ]
        c = integers.c[i]
        driving.append((Scaled(-c.integer, c.fraction_bits), wide, f"alpha{i + 1}"))
        if i + 1 < order:
            driving.append((ONE, states[i + 1], ""))
        elif integers.gain:
            driving = [(c, f"e{number}", f"alpha{i + 1}")]
        if not sheet.temporary(differences[i], driving, fractions[i]):
            return None
        if sheet.ranges[differences[i]].highest <= 0:  # rounded down the lowest is -1
            raise _nothing_taken_in(number, sheet.ranges[states[i]])
    for state, difference in zip(states, differences, strict=True):
        limits = frame.limits if section.pole_at_one and state == wide else None
        if not sheet.state(state, (state, difference), limits):
            return None
    rows = _coefficients(section, integers, fractions)
    return sheet.core(first, wide, integers.transfer, rows, _steady(section, sheet, integers, states))


def _nothing_taken_in(number: int, state: Interval) -> Refused:
    found = f"states of {bits_of(state) - 1} bits, in which all that comes in is rounded to nothing"
    accepted = "states fine enough for the input and the coefficients"
    remedy = "wider state_bits, or none"
    return Refused(Problem(f"arithmetic.state_bits, section {number}", found, accepted, remedy))


def _steady(section: ExactSection, sheet: Sheet, integers: Integers, states: list[str]) -> tuple[Sum, ...] | None:
    """w = gain x, and of order 2 c1 w = n1 x + s2; the output of a pole at z = 1 is not among them."""
    source = sheet.frame.source
    rests: list[tuple[str, list[Weighed]]] = []
    if integers.gain:
        rests.append((states[0], [(part, source, "") for part in integers.gain]))
    elif not section.pole_at_one or integers.n[0].integer:
        return None
    if len(states) > 1:
        slope_taken = Scaled(-integers.n[1].integer, integers.n[1].fraction_bits)
        rests.append((states[1], [(integers.c[0], states[0], ""), (slope_taken, source, "")]))
    # a state that rests at zero is left as a reset leaves it
    sums = [sheet.steady(state, terms) for state, terms in rests if any(term[0].integer for term in terms)]
    return None if None in sums else tuple(one for one in sums if one is not None)


def _coefficients(section: ExactSection, integers: Integers, fractions: tuple[int, ...]) -> tuple[Coefficient, ...]:
    """With D = 2^-k, where k is how much finer the second state's last place is than the first one's."""
    with working_bits(SCALING_BITS):
        exact = Numbers.of(section)
        if len(fractions) == 2:
            k = fractions[1] - fractions[0]
        else:
            k = 0 if exact.c[0].contains(0) else -floor_log2(exact.c[0])
        rows = [("b0", exact.n[0], integers.n[0], 0)]
        rows += [(f"beta{i}", exact.n[i], integers.n[i], i * k) for i in range(1, len(exact.n))]
        rows += [(f"alpha{i}", exact.c[i - 1], integers.c[i - 1], i * k) for i in range(1, len(exact.c) + 1)]
        if integers.gain:
            rows = [row for row in rows if row[0] != f"beta{len(exact.n) - 1}"]
            rows.append(("gain", exact.n[-1] / exact.c[-1], integers.gain[0], 0))
        if integers.sum_of_others:
            rows = [row for row in rows if row[0] != "beta1"]
        return tuple(
            Coefficient(
                name,
                stored.integer,
                stored.fraction_bits - power,
                to_text(number * fmpq(2) ** power, 9),
                mid_float(stored.integer - number * fmpq(2) ** stored.fraction_bits),
            )
            for name, number, stored, power in rows
            if stored.integer or not is_exactly_zero(number)
        )
