"""One screen for the terminal."""

from collections.abc import Iterable, Mapping, Sequence
from math import isfinite
from typing import Any

import numpy as np
from flint import arb

from afterkick.design.schema import Design
from afterkick.fixed.program import Program, ProgramSection
from afterkick.fixed.structures import Candidate
from afterkick.model.model import Model
from afterkick.model.roots import Roots
from afterkick.numbers import nearest_float, working_bits
from afterkick.report.data import REPORT_BITS
from afterkick.report.formulas import ball_text, closed_form, counted, exact_text, number
from afterkick.report.layout import LABEL, row
from afterkick.report.proofs import proof_rows
from afterkick.report.relaxation import relaxation_rows
from afterkick.report.response import Kick
from afterkick.report.settling import settled_rows
from afterkick.sampling.response_errors import CONVENTION, ResponseErrors
from afterkick.targets import TargetProfile
from afterkick.verdict import Assessment, BudgetLine, FixedPoint, SinglePrecision

__all__ = ["check_text", "headline", "kick_text", "targets_text", "tour_text"]

_NOISE_PERCENT = 1e-9
"""Below this a figure is the rounding of double precision."""


def headline(found: Assessment) -> str:
    """Name, title and verdict on one line; what falls short is named."""
    identity = found.design.design
    title = f" ({identity.title})" if identity.title != identity.name else ""
    return f"{identity.name}{title}: {_verdict_text(found)}"


def _verdict_text(found: Assessment) -> str:
    reasons = [line.item for line in found.budget if line.holds is False]
    if found.model.stability == "unstable":
        reasons.append("the model is unstable")
    match found.verdict:
        case "holds":
            elsewhere = [f"; {line.item}: see {line.judged_by}" for line in found.budget if line.judged_by]
            given = len(found.budget) > len(elsewhere)
            return "".join(["holds" if given else "holds, as no budget is given", *elsewhere])
        case "falls short":
            return f"FALLS SHORT: {', '.join(reasons)}"
        case verdict:
            unjudged = ", ".join(line.item for line in found.budget if line.holds is None and not line.judged_by)
            return f"{verdict.upper()}: {unjudged} not judged"


def check_text(found: Assessment) -> str:
    """The whole assessment, at most a screen for a design of a few sections."""
    lines = [headline(found), ""]
    lines += _model_lines(found) + _sampling_lines(found)
    match found.realisation:
        case FixedPoint() as fixed:
            lines += _fixed_lines(fixed) + _error_lines(found)
            proved = proof_rows(fixed.bounds, fixed.program) + settled_rows(fixed.settled)
            lines += [row(*labelled) for labelled in proved]
        case SinglePrecision() as single:
            from afterkick.report.single import estimate_rows, single_lines  # fixed point pays nothing for it

            lines += single_lines(single) + _error_lines(found)
            lines += [row(*labelled) for labelled in estimate_rows(single)]
    lines += _budget_lines(found.budget)
    lines += [row("warning", text) for text in (*found.model.warnings, *found.sampled.warnings)]
    return "\n".join(lines)


def _model_lines(found: Assessment) -> list[str]:
    model, signals = found.model, found.design.signals
    dc_gain = model.dc_gain_ball()
    gain = "integrates" if dc_gain is None else f"gain {ball_text(dc_gain)} at 0 Hz"
    dead_time = f", dead time {exact_text(model.dead_time_s)} s" if model.dead_time_s != 0 else ""
    lines = [row("model", f"order {model.order}, {model.stability}, {gain}{dead_time}")]
    lines += [row("  poles", _roots_text(model.poles), formula=True)]
    if model.zeros:
        lines += [row("  zeros", _roots_text(model.zeros), formula=True)]
    if model.cancelled:
        named = _roots_text(dict(model.cancelled))
        lines += [row("  cancelled", f"{named}, exactly: a pole against a zero", formula=True)]
    unit = _impulse_unit(signals.output.unit, signals.input.unit)
    shift = f", t counted from {exact_text(model.dead_time_s)} s" if model.dead_time_s != 0 else ""
    with working_bits(128):
        smooth = f"{closed_form(model.response_modes(), model.feedthrough())} [{unit}]{shift}"
        lines += [row("  h(t)", smooth, formula=True)]
        if model.relative_degree < 0:
            return [*lines, row("", "for t > 0; improper: at t = 0 there are derivatives of the Dirac impulse δ(t)")]
        if model.free is not None:
            free = closed_form(model.free.modes(), arb(0))
            text = f"y(t) = {free} [{signals.output.unit or '1'}], from the values before 0"
            lines += [row("  free", text, formula=True)]
    return [*lines, row("  at t = 0", _jumps_text(model), formula=True)]


def _impulse_unit(output: str, input_: str) -> str:
    return f"{output or '1'}/({input_} s)" if input_ else f"{output or '1'}/s"


def _roots_text(roots: Roots) -> str:
    listed = [root.text() + (f" ({times} times)" if times > 1 else "") for root, times in roots.items()]
    return ", ".join(listed)


def _jumps_text(model: Model) -> str:
    """Derivatives that move: value before, value after a unit-area impulse."""
    jumps = model.markov_parameters(model.order)[1:]
    parts = []
    for i, jump in enumerate(jumps):
        before = arb(model.before[i]) if i < len(model.before) else arb(0)
        mark = "y" + "'" * i if i < 4 else f"y^({i})"
        if not jump.contains(0):
            parts.append(f"{mark} from {ball_text(before)} to {ball_text(before + jump)}")
        elif not before.is_zero():
            parts.append(f"{mark} stays {ball_text(before)}")
    return "with a unit-area impulse " + ", ".join(parts[:4]) + (" ..." if len(parts) > 4 else "")


def _sampling_lines(found: Assessment) -> list[str]:
    sampled = found.sampled
    delay = f", {counted(sampled.delay_samples, 'sample')} of delay" if sampled.delay_samples else ""
    state = "" if sampled.stable else ", marginal" if sampled.marginal else ", UNSTABLE"
    lines = [row("sampling", f"{sampled.method} at {exact_text(sampled.rate_hz)} Hz{delay}{state}")]
    for k, section in enumerate(sampled.sections(REPORT_BITS), start=1):
        b, a = (", ".join(_short(value) for value in group) for group in (section.b, section.a))
        text = f"b ({b}); a ({a}); 1+a1+a2 {_short(section.a_at_one)}"
        lines.append(row(f"  section {k}", text, formula=True))
    return lines


def _short(value: arb) -> str:
    whole = value.unique_fmpz() if value.is_exact() else None
    return ball_text(value, 9) if whole is None else str(whole)


def _fixed_lines(found: FixedPoint) -> list[str]:
    program = found.program
    rounding = "floor" if program.rounding.value == "floor" else f"round to {program.rounding.value}"
    words = f"{program.data_bits}-bit data, {program.coefficient_bits}-bit coefficients"
    lines = [row("integers", f"{program.structure}, {words}, {rounding}, {program.overflow.value}")]
    for k, section in enumerate(program.sections, start=1):
        shown = _integers(section) if program.structure in ("direct", "transposed") else _named(section)
        lines.append(row(f"  section {k}", shown, formula=True))
    if found.arrangement is not None:
        noise, by_rule = number(found.arrangement.noise, 3), number(found.arrangement.noise_by_rule, 3)
        text = f"paired and ordered anew: rounding noise {noise} counts r.m.s. instead of {by_rule} (estimates)"
        lines.append(row("  sections", text))
    lines += [_candidate(one, program) for one in found.tried]
    if found.relaxation is not None:
        lines += [row(*labelled) for labelled in relaxation_rows(found.relaxation)]
    choice = found.choice
    if choice is None:
        return lines
    before, after = (f"{100 * error:.3g} %" for error in (choice.nearest_error, choice.chosen_error))
    lines.append(row("  choice", f"peak impulse error {after} of the exact filter's; nearest integers {before}"))
    names = ", ".join(
        one.name if one.section is None else f"{one.name} of section {one.section}" for one in choice.gave_way
    )
    return [*lines, row("", f"not kept exactly: {names}")] if names else lines


def _named(section: ProgramSection) -> str:
    """The coefficients of a structure whose own are not b and a."""
    return "; ".join(f"{c.name} {c.integer} / 2^{c.fraction_bits}" for c in section.coefficients)


def _candidate(one: Candidate, chosen: Program) -> str:
    """A structure that "auto" tried, with what it costs and why it was or was not taken."""
    name = one.structure + (f", carry {one.carry}" if one.carry else "")
    if one.program is None:
        verdict = f"refused: {one.refused[0].found}"
    elif one.program is chosen:
        verdict = "taken"
    elif one.falls_short is None:
        verdict = "dearer"
    else:
        verdict = f"falls short: {', '.join(one.falls_short)}"
    cost = "" if one.operations is None else f"{one.operations} operations, "
    return row("  tried", f"{name}: {cost}{verdict}")


def _integers(section: ProgramSection) -> str:
    worst = max((abs(c.error_last_places) for c in section.coefficients), default=0.0)
    b, a = (", ".join(map(str, group)) for group in (section.b, section.a))
    text = f"b ({b}) / 2^{section.b_fraction_bits}; a ({a}) / 2^{section.a_fraction_bits}; 1+a1+a2 {sum(section.a)}"
    return text + (f"; largest rounding {worst:.2f} last places" if worst > 0.5 else "")


def _error_lines(found: Assessment) -> list[str]:
    exact, shipped = found.errors, found.shipped
    column, peak, unit = _staircase_scale(found)
    lines = [row("errors", f"{'':<40}{'sampled exactly':>20}{column:>22}")]

    def add(label: str, pick: str, values: Iterable[float | None], unit: str, absent: str = "none") -> None:
        texts = [absent if value is None or not isfinite(value) else _figure(value, unit) for value in values]
        lines.append(f"{label:<{LABEL}}{pick:<40}{texts[0]:>20}{texts[1]:>22}")

    if exact.impulse is not None and shipped.impulse is not None:
        pair = (exact.impulse, shipped.impulse)
        add("  impulse", "peak", (_percent(e.peak) for e in pair), "%")
        add("", "r.m.s.", (_percent(e.rms) for e in pair), "%")
        add("", "area", (_percent(e.area) for e in pair), "%")
        add("", "best explained by a delay of", (e.delay_samples for e in pair), "T")
        add("", "peak that remains then", (_percent(e.peak_aligned) for e in pair), "%")
    else:
        lines.append(row("  impulse", "an improper model has no impulse response to compare with"))
    if exact.step is not None and shipped.step is not None:
        steps = (exact.step, shipped.step)
        add("  step", "peak at the samples", (_percent(e.peak) for e in steps), "%")
        add("", "peak between them, output held", (_percent(e.between_samples) for e in steps), "%")
    worst = [(e.staircase_at_samples, e.staircase_between_samples) for e in (exact, shipped)]
    for label, pick, values in (
        ("  staircase", "worst at the samples", (at for at, _ in worst)),
        ("", "worst between them, output held", (between for _, between in worst)),
    ):
        add(label, pick, (value if value is None else value * peak for value in values), unit, "no bound")
    bands = (exact.band, shipped.band)
    up_to = f"largest up to {number(exact.band.up_to_hz)} Hz"
    add("  gain", up_to, (band.magnitude_db for band in bands), "dB")
    dc = [_ppm(errors) for errors in (exact, shipped)]
    if dc[0] is not None:
        add("", "at 0 Hz" if found.model.poles_at_origin == 0 else "of the growth of an integrator", dc, "ppm")
    add("  phase", up_to, (band.phase_deg for band in bands), "deg")
    for mode in exact.modes:
        if mode.analog_hz:
            before = f"{number(mode.analog_hz)} Hz, decay {number(mode.analog_decay_per_s)} /s"
            after = f"{number(mode.sampled_hz)} Hz, decay {number(mode.sampled_decay_per_s)} /s"
            lines.append(row("  mode", f"{before} is sampled as {after}"))
    return [*lines, row("", f"(estimates: {CONVENTION})")]


def _staircase_scale(found: Assessment) -> tuple[str, float, str]:
    """What the second column shows, and the promised peak in the unit of the output and that unit."""
    match found.realisation:
        case FixedPoint(program):
            counts = 2 ** (program.data_bits - 1)
            peak = nearest_float(program.input_format.peak / program.output_format.full_scale * counts)
            return "with the integers", peak, "counts"
        case SinglePrecision(program):
            return "with the singles", nearest_float(program.input_format.peak), program.output_format.unit


def _percent(value: float | None) -> float | None:
    return None if value is None else 100 * value


def _figure(value: float, unit: str) -> str:
    if unit == "%" and 0 < abs(value) < _NOISE_PERCENT:
        return "< 1e-9 %"
    return f"{number(value, 4)} {unit}".rstrip()


def _ppm(errors: ResponseErrors) -> float | None:
    found = errors.dc_gain_relative if errors.dc_gain_relative is not None else errors.growth_relative
    return None if found is None else 1e6 * found


def _budget_lines(budget: Sequence[BudgetLine]) -> list[str]:
    if not budget:
        return [row("budget", "none given: nothing is judged")]
    lines = []
    for k, line in enumerate(budget):
        found = "" if line.found is None else f"{line.found:.4g}"
        remark = f"   ({line.remark})" if line.remark else ""
        text = f"{line.item:<24}{found:>12}  of {line.limit:<10.6g}{_judged(line)}{remark}"
        lines.append(row("budget" if k == 0 else "", text))
    return lines


def _judged(line: BudgetLine) -> str:
    if line.judged_by:
        return f"see {line.judged_by}"
    return {True: "holds", False: "FALLS SHORT", None: "not judged"}[line.holds]


def kick_text(design: Design, rows: Kick) -> str:
    """A table of the three responses, what is in none of its columns above it."""
    signals = design.signals
    unit = _impulse_unit(signals.output.unit, signals.input.unit)
    if design.arithmetic.kind == "float32":
        kicked = f"the singles were kicked with {number(rows.amplitude, 9)} {signals.input.unit}".rstrip()
        names, width = ("float32", f"output [{signals.output.unit or '1'}]"), 16
    else:
        kicked, names, width = f"the integers were kicked with {rows.amplitude} counts", ("integer", "counts"), 12
    lines = [
        f"{design.design.name}: impulse response in {unit}; {design.sampling.method} at "
        f"{exact_text(design.sampling.rate_hz)} Hz; {kicked}",
    ]
    if rows.dirac:
        lines.append(f"a Dirac part of weight {number(rows.dirac)} at t = dead time is in none of the columns")
    if rows.improper:
        lines.append("the model is improper: derivatives of the Dirac impulse at t = dead time are not in h(t)")
    if rows.clipped:
        lines.append(f"{rows.clipped} of the output codes are at an end of its range: a smaller --amplitude shows more")
    heads = f"{'analytic h(t)':>16} {'sampled h[n]/T':>16} {names[0]:>16} {names[1]:>{width}}"
    lines.append(f"{'n':>6} {'t [s]':>14} {heads}")
    columns = zip(rows.n, rows.t, rows.analytic, rows.sampled, rows.shipped, rows.outputs, strict=True)
    for n, t, h, d, s, out in columns:
        cells = " ".join(f"{value:>16.8g}" if isfinite(value) else f"{'none':>16}" for value in (h, d, s))
        lines.append(f"{n:>6} {t:>14.8g} {cells} {_output(out):>{width}}")
    return "\n".join(lines)


def _output(value: np.integer[Any] | np.floating[Any]) -> str:
    """A code, or a single to the 9 digits that tell it from all others."""
    if isinstance(value, np.integer):
        return str(value)
    return number(float(value), 9) if isfinite(value) else "none"


def tour_text(found: Assessment, stop: Mapping[str, Any], seconds: float) -> str:
    """One demo design in a few lines."""
    model, program, shipped = found.model, found.realisation.program, found.shipped
    with working_bits(128):
        form = closed_form(model.response_modes(), model.feedthrough())
    how = "integer for integer" if isinstance(program, Program) else "bit for bit"
    agreement = f"equal {how}" if stop["equal"] else "DIFFERENT from the simulator"
    compiled = f"compiled by {stop['compiler']}; {stop['samples']} samples {agreement}"
    if isinstance(program, Program):
        label, words = "  integers", f"{program.data_bits}-bit data, {program.coefficient_bits}-bit coefficients"
    else:
        label, words = "  float32", "single precision"
    lines = [
        headline(found),
        row("  model", f"order {model.order}; h(t) = {form}", formula=True),
        row("  sampled", f"{found.sampled.method} at {exact_text(found.sampled.rate_hz)} Hz, {_delay_text(found)}"),
        row(label, f"{words}, {counted(len(program.sections), 'section')}{_impulse_text(shipped)}"),
        row("  C", f"{stop['c_lines']} lines; {'not compiled' if stop['lacking'] else compiled}"),
        row("  time", f"{seconds:.2f} s"),
        "",
    ]
    return "\n".join(lines)


def _impulse_text(shipped: ResponseErrors) -> str:
    impulse = shipped.impulse
    if impulse is None or impulse.peak is None or impulse.rms is None:
        return ""
    return f"; impulse error {_figure(100 * impulse.peak, '%')} peak, {_figure(100 * impulse.rms, '%')} r.m.s."


def _delay_text(found: Assessment) -> str:
    total = found.model.dead_time_s * found.sampled.rate_hz
    return "no dead time" if total == 0 else f"{exact_text(total)} samples of dead time"


def targets_text(profiles: Iterable[TargetProfile]) -> str:
    """A table of profiles, the products of one instruction below each title."""
    lines = [f"{'name':<14}{'word':>5}{'int':>5}  title and products of one instruction"]
    for profile in profiles:
        lines.append(f"{profile.name:<14}{profile.word_bits:>5}{profile.int_bits:>5}  {profile.title}")
        lines.append(f"{'':<26}{', '.join(profile.multipliers) or 'no multiply instruction'}")
    return "\n".join(lines)
