"""The parallel structure: partial fractions, every part fed by the input, all added up in one wide sum.

H is a few taps on the input plus a part for each pole and pole pair, in the delta form, with one rounding for all of
them.  The gains of the parts at z = 1 lie on one grid, and the largest gives way so that they add up to the gain of the
filter, exactly where the grid has it.

This is the form of a controller: a pole at z = 1 is a part of its own, a wide state that adds up its input without
rounding and that a clamp holds within the limits of the output, so that it does not wind up.
"""

import math
from collections.abc import Callable, Iterator
from fractions import Fraction
from typing import TYPE_CHECKING, cast

from attrs import evolve
from flint import arb, ctx, fmpq

from afterkick.errors import Problem, Refused, each
from afterkick.fixed.binary_points import (
    MINUS_ONE,
    ONE,
    ZERO,
    Scaled,
    floor_log2,
    over_power_of_two,
    rounded,
    simplest,
)
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
from afterkick.fixed.parts import Parts
from afterkick.fixed.program import Coefficient, Move, Preset, Program, ProgramSection, Role, Step, Word
from afterkick.fixed.quantise import PROBE_BITS, ExactSection, exact_sections
from afterkick.fixed.ranges import require_valid
from afterkick.fixed.scaling import FloatSection
from afterkick.fixed.wide import (
    MOST_STATE_BITS,
    Core,
    Frame,
    Weighed,
    known_words,
    output_sum,
    weighed_sum,
)
from afterkick.numbers import fraction, mid_float, round_to_integer, to_text, working_bits

if TYPE_CHECKING:
    from afterkick.design.schema import Arithmetic, Signals
    from afterkick.sampling.sampled import Sampled

__all__ = ["parallel_program"]

MOST_TAPS = 3
TRIES = 3
"""Of binary points for which the sum of all parts fits the accumulator."""
WANTED = "wanted"


def parallel_program(
    sampled: "Sampled", arithmetic: "Arithmetic", signals: "Signals", name: str, *, title: str = "", digest: str = ""
) -> Program:
    """The integer filter that realises H * (input full scale / output full scale) as a sum of its partial fractions.

    Its first section has the taps on the input, and adds all up; the others are the parts.  A clamp holds the output
    within its limits, and a part with a pole at z = 1 too; without one the limits are those of the data word.

    :raises Refused: for repeated poles other than real double ones, and as the delta structure.
    """
    problems = unsupported(evolve(arithmetic, clamp=None)) + delay_problems(sampled.delay_samples)
    parts = Parts(sampled)
    if not parts.exist or len(parts.taps(PROBE_BITS)) > MOST_TAPS:
        problems.append(
            Problem(
                "arithmetic.structure",
                "a filter with a repeated pole, or with several at z = 0, has no sum of first- and second-order parts",
                f"poles that all differ, but a real one may be double, and up to {MOST_TAPS - 1} may be at z = 0",
                'structure = "delta" or another cascade',
            )
        )
    if problems:
        raise Refused(problems)
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
        _limits(arithmetic.clamp, signals, builder.data_bits),
    )
    most = MOST_STATE_BITS
    for _ in range(TRIES):
        taps, gains = _gains(parts, sections, ratio, builder.coefficient_bits, most)
        cores = _cores(sections, gains, evolve(frame, most_fraction_bits=most))
        most, before = min(most, _finest_sum(builder, cores, taps)), most
        if most == before:
            break
    weighed = [(tap, delayed("x", sampled.delay_samples + i), _tap_name(i)) for i, tap in enumerate(taps)]
    depth = sampled.delay_samples + len(taps) - 1
    held = arithmetic.clamp is not None or any(section.pole_at_one for section in sections)
    wired = (
        _adding_section(parts, cores, taps, weighed, ratio, frame, depth=depth, held=held),
        *_part_sections(sections, cores, frame, depth),
    )
    preset = _preset(sections, cores, weighed, frame, depth)
    program = finished(wired, "parallel", sampled, arithmetic, signals, name, title=title, digest=digest)
    if preset is None:
        return program
    program = evolve(program, preset=preset)
    require_valid(program)
    return program


def _limits(clamp: tuple[fmpq, fmpq] | None, signals: "Signals", data_bits: int) -> tuple[int, int]:
    """The codes within the clamp, or all codes.

    :raises Refused: where no two are within it.
    """
    scale = 1 << (data_bits - 1)
    if clamp is None:
        return -scale, scale - 1
    low, high = (fraction(end / signals.output.full_scale) * scale for end in clamp)
    lowest, highest = math.ceil(low), min(math.floor(high), scale - 1)
    if lowest >= highest:
        found = f"limits at {float(low):.6g} and {float(high):.6g} output counts"
        accepted = "limits with two codes or more between them"
        raise Refused(Problem("arithmetic.clamp", found, accepted, "wider limits, or a smaller output full_scale"))
    return lowest, highest


def _cores(sections: list[ExactSection], gains: list[tuple[Scaled, ...]], frame: Frame) -> list[Core]:
    """The parts.

    :raises Refused: with the problems of all of them.
    """
    return each(lambda part: delta_core(part[0], frame, part[1]), zip(sections, gains, strict=True))


def _finest_sum(builder: Builder, cores: list[Core], taps: tuple[Scaled, ...]) -> int:
    """The fraction bits that the accumulator has room for when all parts and taps are at their largest."""
    reach = sum((abs(tap.value) for tap in taps), Fraction(0)) * (1 << (builder.data_bits - 1))
    reach += sum(Fraction(2) ** (core.bits - 1 - core.fraction_bits) for core in cores)
    return builder.widest - 2 - math.ceil(reach).bit_length()


def _tap_name(index: int) -> str:
    return f"direct{index}" if index else "direct"


def _gains(
    parts: Parts, sections: list[ExactSection], ratio: fmpq, bits: int, most_fraction_bits: int
) -> tuple[tuple[Scaled, ...], list[tuple[Scaled, ...]]]:
    """The taps, and the gain of each part at z = 1, none for a pole there: on one grid and with an exact sum.

    The part with the largest gain also takes away what the taps add at z = 1.
    """

    def exact() -> list[arb]:
        whole = parts.sections(ctx.prec)
        return [part.b_at_one * ratio / part.a_at_one for part, found in zip(whole, endless, strict=True) if not found]

    endless = [section.pole_at_one for section in sections]
    with working_bits(PROBE_BITS):
        first = [tap * ratio for tap in parts.taps(PROBE_BITS)]
        probed = exact()
        total = sum(probed, sum(first, arb(0)))
        # about the largest sample of the impulse response: the taps need not be finer
        peak = max(
            abs(mid_float(number)) / slope(part) ** i
            for part in map(Numbers.of, sections)
            for i, number in enumerate(part.n[1:])
        )
    finest = min(most_fraction_bits, bits + 2 - math.floor(math.log2(peak)) if peak else most_fraction_bits)
    taps = tuple(
        ZERO
        if tap.contains(0)
        else rounded(lambda: parts.taps(ctx.prec)[i] * ratio, bits, f"tap {i} of the direct part", finest)  # noqa: B023
        for i, tap in enumerate(first)
    )
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
    if whole:
        gains[most] += tuple(Scaled(-tap.integer, tap.fraction_bits) for tap in taps if tap.integer)
    rest = iter(gains)
    return taps, [() if found else next(rest) for found in endless]


def _on_grid(compute: Callable[[], arb], probed: arb, grid: int) -> int:
    if probed.contains(0):
        return 0
    return round_to_integer(lambda: compute() * fmpq(2) ** grid, "the gain of a part at z = 1")


def _simple(total: arb) -> Fraction:
    with working_bits(PROBE_BITS):
        return Fraction(0) if total.contains(0) else simplest(total)


def _adding_section(
    parts: Parts,
    cores: list[Core],
    taps: tuple[Scaled, ...],
    weighed: list[Weighed],
    ratio: fmpq,
    frame: Frame,
    *,
    depth: int,
    held: bool,
) -> ProgramSection:
    """The output, from the states as they were, before what brings the parts on; the input is kept for ``depth``."""
    builder = frame.builder
    output = Word("y", builder.data_bits, frame.place, Role.OUTPUT)
    rows = []
    with working_bits(PROBE_BITS):
        for i, (tap, exact) in enumerate(zip(taps, parts.taps(PROBE_BITS), strict=True)):
            error = mid_float(tap.integer - exact * ratio * fmpq(2) ** tap.fraction_bits)
            rows.append(Coefficient(_tap_name(i), tap.integer, tap.fraction_bits, to_text(exact * ratio, 9), error))
    b, b_bits = over_power_of_two(*[tap.value for tap in (*taps, ZERO, ZERO)][:3])
    return ProgramSection(
        words=(*signal_words("x", Role.INPUT, frame.place, depth, builder.data_bits), output),
        steps=(output_sum(builder, cores, weighed, frame.limits if held else None),),
        source=frame.source,
        dest=output.name,
        b=b,
        b_fraction_bits=b_bits,
        a=(1, 0, 0),
        a_fraction_bits=0,
        coefficients=tuple(row for row in rows if row.integer),
    )


def _part_sections(
    sections: list[ExactSection], cores: list[Core], frame: Frame, depth: int
) -> Iterator[ProgramSection]:
    """What brings each part on, and at the end the input words."""
    for section, core in zip(sections, cores, strict=True):
        last = section is sections[-1]
        steps = (*core.steps, *(moves("x", depth) if last else ()))
        yield core.section(core.words, steps, frame.source, core.wide, marginal=section.marginal)


def _preset(
    sections: list[ExactSection], cores: list[Core], weighed: list[Weighed], frame: Frame, depth: int
) -> Preset | None:
    """The parts at rest, and the one that integrates at what they and the taps leave of the wanted output.

    None without a part that integrates, with several, or where a sum is too wide.
    """
    whole = [core for section, core in zip(sections, cores, strict=True) if section.pole_at_one]
    if len(whole) != 1 or any(core.steady is None for core in cores):
        return None
    steps: list[Step] = [Move(delayed("x", age), delayed("x", age - 1)) for age in range(1, depth + 1)]
    steps += [step for core in cores for step in core.steady or ()]
    (free,) = whole
    others = [core for core in cores if core is not free]
    known = known_words(frame.builder, others, [WANTED, *(word for _, word, _ in weighed)])
    left: list[Weighed] = [(ONE, WANTED, ""), *((MINUS_ONE, core.wide, "") for core in others)]
    left += [(Scaled(-tap.integer, tap.fraction_bits), word, "") for tap, word, _ in weighed]
    total = weighed_sum(frame.builder, free.wide, left, *known, free.fraction_bits)
    if total is None:
        return None
    assert frame.limits is not None
    lowest, highest = (end << free.fraction_bits for end in frame.limits)
    steps.append(evolve(total, limits=(lowest, highest)))
    return Preset((Word(WANTED, frame.builder.data_bits, frame.place, Role.INPUT),), tuple(steps), WANTED)
