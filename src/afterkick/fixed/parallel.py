"""The parallel structure: partial fractions, every part fed by the input, all added up in one wide sum.

H is a direct part plus a part for each pole and pole pair, in the delta form, with one rounding for all of them.  The
gains of the parts at z = 1 lie on one grid, and the largest gives way so that they add up to the gain of the filter,
exactly where the grid has it.
"""

import math
from collections.abc import Callable
from fractions import Fraction
from typing import TYPE_CHECKING, cast

from attrs import evolve
from flint import arb, ctx, fmpq

from afterkick.errors import Problem, Refused
from afterkick.fixed.cascade import (
    Builder,
    delay_problems,
    delayed,
    finished,
    moves,
    signal_words,
    unsupported,
)
from afterkick.fixed.delta_core import Numbers, delta_core, slope
from afterkick.fixed.program import Coefficient, Program, ProgramSection, Role, Word
from afterkick.fixed.quantise import PROBE_BITS, ExactSection, exact_sections
from afterkick.fixed.scaling import FloatSection
from afterkick.fixed.wide import ZERO, Core, Frame, Scaled, floor_log2, output_sum, over_power_of_two, rounded, simplest
from afterkick.numbers import fraction, mid_float, round_to_integer, to_text, working_bits
from afterkick.sampling.sections import Section

if TYPE_CHECKING:
    from afterkick.design.schema import Arithmetic, Signals
    from afterkick.sampling.sampled import Sampled

__all__ = ["parallel_program"]


def parallel_program(
    sampled: "Sampled", arithmetic: "Arithmetic", signals: "Signals", name: str, *, title: str = "", digest: str = ""
) -> Program:
    """The integer filter that realises H * (input full scale / output full scale) as a sum of its partial fractions.

    Its first section is the direct part, and adds all up; the others are the parts.

    :raises Refused: for repeated poles, and as the delta structure.
    """
    problems = unsupported(arithmetic) + delay_problems(sampled.delay_samples)
    if sampled.parallel(PROBE_BITS) is None:
        problems.append(
            Problem(
                "arithmetic.structure",
                "a filter with a repeated pole, or one at z = 0, has no sum of first- and second-order parts",
                "poles that all differ",
                'structure = "delta" or another cascade',
            )
        )
    if problems:
        raise Refused(problems)
    parts = _Parts(sampled)
    ratio = signals.input.full_scale / signals.output.full_scale
    sections = [evolve(section, gain=ratio) for section in exact_sections(cast("Sampled", parts))]
    builder = Builder.of(arithmetic)
    peak = float(fraction(signals.input.peak_or_full_scale / signals.input.full_scale))
    place = builder.data_bits - 1
    frame = Frame(
        builder,
        arithmetic.state_bits,
        delayed("x", sampled.delay_samples),
        builder.data_bits,
        0,
        place,
        place,
        (FloatSection((peak, 0.0, 0.0), (0.0, 0.0), 0),),
        (),
        4 * len(sections),
    )
    direct, gains = _gains(parts, sections, ratio, builder.coefficient_bits)
    cores = []
    for section, gain in zip(sections, gains, strict=True):
        try:
            cores.append(delta_core(section, frame, gain))
        except Refused as refusal:
            problems += refusal.problems
    if problems:
        raise Refused(problems)
    wired = _wired(parts, sections, cores, direct, ratio, frame, sampled.delay_samples)
    return finished(wired, "parallel", sampled, arithmetic, signals, name, title=title, digest=digest)


class _Parts:
    """The partial fractions as sections without b0, and the direct part, which is the first sample of H."""

    def __init__(self, sampled: "Sampled") -> None:
        self.sampled = sampled
        self.marginal = sampled.marginal
        self.known: dict[int, tuple[arb, tuple[Section, ...]]] = {}

    def _parts(self, bits: int) -> tuple[arb, tuple[Section, ...]]:
        if bits not in self.known:
            self.known[bits] = self._computed(bits)
        return self.known[bits]

    def _computed(self, bits: int) -> tuple[arb, tuple[Section, ...]]:
        found = self.sampled.parallel(bits)
        assert found is not None
        with working_bits(max(bits, ctx.prec)):
            direct, none = found[0], arb(0)
            sections = []
            for part in found[1]:
                (r0, r1), (_, a1, a2) = part.b, part.a
                direct += r0
                sections.append(Section((none, r1 - r0 * a1, -r0 * a2), part.a))
            return direct, tuple(sections)

    def sections(self, bits: int) -> tuple[Section, ...]:
        """One a pole or pole pair."""
        return self._parts(bits)[1]

    def direct(self, bits: int) -> arb:
        """H at z = infinity."""
        return self._parts(bits)[0]


def _gains(
    parts: _Parts, sections: list[ExactSection], ratio: fmpq, bits: int
) -> tuple[Scaled, list[tuple[Scaled, ...]]]:
    """The direct part, and the gain of each part at z = 1, none for a pole there: on one grid and with an exact sum.

    The part with the largest gain also takes away what the direct part adds at z = 1.
    """

    def exact() -> list[arb]:
        whole = parts.sections(ctx.prec)
        return [part.b_at_one * ratio / part.a_at_one for part, found in zip(whole, endless, strict=True) if not found]

    endless = [section.pole_at_one for section in sections]
    with working_bits(PROBE_BITS):
        first = parts.direct(PROBE_BITS) * ratio
        probed = exact()
        total = sum(probed, first)
        # about the largest sample of the impulse response: the direct part need not be finer
        peak = max(
            abs(mid_float(number)) / slope(part) ** i
            for part in map(Numbers.of, sections)
            for i, number in enumerate(part.n[1:])
        )
    direct = ZERO
    if not first.contains(0):
        finest = bits + 2 - math.floor(math.log2(peak)) if peak else None
        direct = rounded(lambda: parts.direct(ctx.prec) * ratio, bits, "the direct part", finest)
    largest = max((floor_log2(value) for value in probed if not value.contains(0)), default=0)
    limit, grid = 1 << (bits - 1), bits - largest
    whole = not any(endless)
    most = max(range(len(probed)), key=lambda i: abs(mid_float(probed[i])), default=0)
    while True:
        integers = [_on_grid(lambda: exact()[i], value, grid) for i, value in enumerate(probed)]  # noqa: B023
        if whole:
            integers[most] += round(_simple(total) * Fraction(2) ** grid) - sum(integers)
        if max(map(abs, integers), default=0) <= limit:
            break
        grid -= 1
    gains: list[tuple[Scaled, ...]] = [(Scaled(integer, grid),) for integer in integers]
    if whole and direct.integer:
        gains[most] += (Scaled(-direct.integer, direct.fraction_bits),)
    rest = iter(gains)
    return direct, [() if found else next(rest) for found in endless]


def _on_grid(compute: Callable[[], arb], probed: arb, grid: int) -> int:
    if probed.contains(0):
        return 0
    return round_to_integer(lambda: compute() * fmpq(2) ** grid, "the gain of a part at z = 1")


def _simple(total: arb) -> Fraction:
    with working_bits(PROBE_BITS):
        return Fraction(0) if total.contains(0) else simplest(total)


def _wired(
    parts: _Parts,
    sections: list[ExactSection],
    cores: list[Core],
    direct: Scaled,
    ratio: fmpq,
    frame: Frame,
    delay_samples: int,
) -> tuple[ProgramSection, ...]:
    """The output first, from the states as they were, then what brings each part on."""
    builder = frame.builder
    with working_bits(PROBE_BITS):
        exact = parts.direct(PROBE_BITS) * ratio
        error = mid_float(direct.integer - exact * fmpq(2) ** direct.fraction_bits)
        row = Coefficient("direct", direct.integer, direct.fraction_bits, to_text(exact, 9), error)
    output = Word("y", builder.data_bits, frame.place, Role.OUTPUT)
    b, b_bits = over_power_of_two(direct.value, Fraction(0), Fraction(0))
    wired = [
        ProgramSection(
            words=(*signal_words("x", Role.INPUT, frame.place, delay_samples, builder.data_bits), output),
            steps=(output_sum(builder, cores, (direct, frame.source)),),
            source=frame.source,
            dest=output.name,
            b=b,
            b_fraction_bits=b_bits,
            a=(1, 0, 0),
            a_fraction_bits=0,
            coefficients=(row,) if direct.integer else (),
        )
    ]
    for section, core in zip(sections, cores, strict=True):
        last = section is sections[-1]
        wired.append(
            ProgramSection(
                words=core.words,
                steps=(*core.steps, *(moves("x", delay_samples) if last else ())),
                source=frame.source,
                dest=core.wide,
                b=core.b,
                b_fraction_bits=core.b_bits,
                a=core.a,
                a_fraction_bits=core.a_bits,
                coefficients=core.coefficients,
                marginal=section.marginal,
            )
        )
    return tuple(wired)
