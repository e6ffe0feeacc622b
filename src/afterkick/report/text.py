"""One screen for the terminal."""

from collections.abc import Iterable, Mapping, Sequence
from typing import Any

from flint import arb

from afterkick.design.schema import Design
from afterkick.fixed.program import ProgramSection
from afterkick.model.model import Model
from afterkick.model.roots import Roots
from afterkick.numbers import fraction, mid_float, to_text, working_bits
from afterkick.report.data import REPORT_BITS
from afterkick.report.formulas import closed_form, exact_text, number
from afterkick.report.response import Kick
from afterkick.sampling.response_errors import CONVENTION, ResponseErrors
from afterkick.targets import TargetProfile
from afterkick.verdict import Assessment, BudgetLine

__all__ = ["check_text", "headline", "kick_text", "targets_text", "tour_text"]

_LABEL = 12


def headline(found: Assessment) -> str:
    """Name, title and verdict on one line."""
    identity = found.design.design
    title = f" ({identity.title})" if identity.title != identity.name else ""
    return f"{identity.name}{title}: {found.verdict.upper() if found.verdict != 'holds' else 'holds'}"


def check_text(found: Assessment) -> str:
    """The whole assessment, at most a screen for a design of a few sections."""
    lines = [headline(found), ""]
    lines += _model_lines(found) + _sampling_lines(found) + _fixed_lines(found) + _error_lines(found)
    lines += _budget_lines(found.budget)
    lines += [f"{'warning':<{_LABEL}}{text}" for text in (*found.model.warnings, *found.sampled.warnings)]
    return "\n".join(lines)


def _row(label: str, text: str) -> str:
    return f"{label:<{_LABEL}}{text}"


def _model_lines(found: Assessment) -> list[str]:
    model, signals = found.model, found.design.signals
    dc_gain = model.dc_gain_ball()
    gain = "integrates" if dc_gain is None else f"gain {number(mid_float(dc_gain))} at 0 Hz"
    dead_time = f", dead time {exact_text(model.dead_time_s)} s" if model.dead_time_s != 0 else ""
    lines = [_row("model", f"order {model.order}, {model.stability}, {gain}{dead_time}")]
    lines += [_row("  poles", _roots_text(model.poles))]
    if model.zeros:
        lines += [_row("  zeros", _roots_text(model.zeros))]
    if model.cancelled:
        lines += [_row("  cancelled", _roots_text(dict(model.cancelled)) + " (exactly, pole against zero)")]
    if model.relative_degree < 0:
        return [*lines, _row("  h(t)", "improper: more zeros than poles")]
    unit = _impulse_unit(signals.output.unit, signals.input.unit)
    shift = f", t counted from {exact_text(model.dead_time_s)} s" if model.dead_time_s != 0 else ""
    with working_bits(128):
        lines += [_row("  h(t)", f"{closed_form(model.response_modes(), model.feedthrough())}  [{unit}]{shift}")]
        if model.free is not None:
            free = closed_form(model.free.modes(), arb(0))
            lines += [_row("  free", f"y(t) = {free}  [{signals.output.unit or '1'}], from the values before 0")]
    return lines + [_row("  at t = 0", _jumps_text(model))]


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
        before = float(fraction(model.before[i])) if i < len(model.before) else 0.0
        if before or not jump.is_zero():
            mark = "y" + "'" * i if i < 4 else f"y^({i})"
            parts.append(f"{mark} {number(before)} to {number(before + mid_float(jump))}")
    return "a unit-area impulse moves " + ", ".join(parts[:4]) + (" ..." if len(parts) > 4 else "")


def _sampling_lines(found: Assessment) -> list[str]:
    sampled = found.sampled
    delay = f", {sampled.delay_samples} samples of delay" if sampled.delay_samples else ""
    state = "" if sampled.stable else ", marginal" if sampled.marginal else ", UNSTABLE"
    lines = [_row("sampling", f"{sampled.method} at {exact_text(sampled.rate_hz)} Hz{delay}{state}")]
    for k, section in enumerate(sampled.sections(REPORT_BITS), start=1):
        b, a = (", ".join(_short(value) for value in group) for group in (section.b, section.a))
        lines.append(_row(f"  section {k}", f"b {b};  a {a};  1+a1+a2 {_short(section.a_at_one)}"))
    return lines


def _short(value: arb) -> str:
    whole = value.unique_fmpz() if value.is_exact() else None
    return to_text(value, 9) if whole is None else str(whole)


def _fixed_lines(found: Assessment) -> list[str]:
    program = found.program
    lines = [
        _row(
            "integers",
            f"{program.structure}, {program.data_bits}-bit data, {program.coefficient_bits}-bit coefficients, "
            f"round to {program.rounding.value}, {program.overflow.value}"
            if program.rounding.value != "floor"
            else f"{program.structure}, {program.data_bits}-bit data, {program.coefficient_bits}-bit coefficients, "
            f"floor, {program.overflow.value}",
        )
    ]
    return lines + [_row(f"  section {k}", _integers(section)) for k, section in enumerate(program.sections, start=1)]


def _integers(section: ProgramSection) -> str:
    worst = max((abs(c.error_last_places) for c in section.coefficients), default=0.0)
    return (
        f"b {', '.join(map(str, section.b))} / 2^{section.b_fraction_bits};  "
        f"a {', '.join(map(str, section.a))} / 2^{section.a_fraction_bits};  "
        f"1+a1+a2 {sum(section.a)} last places"
        + (f";  rounding up to {worst:.2f} last places" if worst > 0.5 else "")
    )


def _error_lines(found: Assessment) -> list[str]:
    exact, shipped = found.errors, found.shipped
    counts = 2 ** (found.program.data_bits - 1)
    peak = float(fraction(found.program.input_format.peak / found.program.output_format.full_scale)) * counts
    lines = [
        _row("errors", f"{'':<44}{'sampled exactly':>18}{'with the integers':>20}"),
        _row("", f"(estimates: {CONVENTION})"),
    ]

    def row(label: str, pick: str, before: float | None, after: float | None, unit: str) -> None:
        texts = ["unbounded" if value is None else f"{value:.4g} {unit}" for value in (before, after)]
        lines.append(_row(f"  {label}", f"{pick:<44}{texts[0]:>18}{texts[1]:>20}"))

    pair = (exact.impulse, shipped.impulse)
    row("impulse", "peak", *(100 * e.peak for e in pair), "%")
    row("", "r.m.s.", *(100 * e.rms for e in pair), "%")
    row("", "area", *(100 * e.area for e in pair), "%")
    row("", "best explained by a delay of", *(e.delay_samples for e in pair), "T")
    row("", "peak that remains then", *(100 * e.peak_aligned for e in pair), "%")
    row("step", "peak at the samples", 100 * exact.step.peak, 100 * shipped.step.peak, "%")
    row("", "peak between them, output held", 100 * exact.step.between_samples, 100 * shipped.step.between_samples, "%")
    at_samples = (exact.staircase_at_samples, shipped.staircase_at_samples)
    row("staircase", "worst at the samples", *(v if v is None else v * peak for v in at_samples), "counts")
    between = (exact.staircase_between_samples, shipped.staircase_between_samples)
    row("", "worst between them, output held", *(v if v is None else v * peak for v in between), "counts")
    row("gain", f"up to {number(exact.band.up_to_hz)} Hz", exact.band.magnitude_db, shipped.band.magnitude_db, "dB")
    row("phase", f"up to {number(exact.band.up_to_hz)} Hz", exact.band.phase_deg, shipped.band.phase_deg, "deg")
    dc = [_ppm(errors) for errors in (exact, shipped)]
    if dc[0] is not None:
        row("dc gain" if found.model.poles_at_origin == 0 else "growth", "", *dc, "ppm")
    for mode in exact.modes:
        if mode.analog_hz:
            before = f"{number(mode.analog_hz)} Hz, decay {number(mode.analog_decay_per_s)} /s"
            after = f"{number(mode.sampled_hz)} Hz, decay {number(mode.sampled_decay_per_s)} /s"
            lines.append(_row("  mode", f"{before} is sampled as {after}"))
    return lines


def _ppm(errors: ResponseErrors) -> float | None:
    found = errors.dc_gain_relative if errors.dc_gain_relative is not None else errors.growth_relative
    return None if found is None else 1e6 * found


def _budget_lines(budget: Sequence[BudgetLine]) -> list[str]:
    if not budget:
        return [_row("budget", "none given: nothing is judged")]
    words = {True: "holds", False: "FALLS SHORT", None: "not judged"}
    lines = []
    for k, line in enumerate(budget):
        found = "" if line.found is None else f"{line.found:.4g}"
        remark = f"   ({line.remark})" if line.remark else ""
        text = f"{line.item:<24}{found:>12}  of {line.limit:<10.6g}{words[line.holds]}{remark}"
        lines.append(_row("budget" if k == 0 else "", text))
    return lines


def kick_text(design: Design, rows: Kick) -> str:
    """A table of the three responses."""
    unit = _impulse_unit(design.signals.output.unit, design.signals.input.unit)
    lines = [
        f"{design.design.name}: impulse response in {unit}; {design.sampling.method} at "
        f"{exact_text(design.sampling.rate_hz)} Hz; the integers were kicked with {rows.amplitude_counts} counts",
    ]
    if rows.dirac:
        lines.append(f"a Dirac part of weight {number(rows.dirac)} at t = dead time is in none of the columns")
    lines.append(f"{'n':>6} {'t [s]':>14} {'analytic h(t)':>16} {'sampled h[n]/T':>16} {'integer':>16} {'counts':>12}")
    columns = zip(rows.n, rows.t, rows.analytic, rows.sampled, rows.integer, rows.counts, strict=True)
    lines += [f"{n:>6} {t:>14.8g} {h:>16.8g} {d:>16.8g} {i:>16.8g} {c:>12}" for n, t, h, d, i, c in columns]
    return "\n".join(lines)


def tour_text(found: Assessment, stop: Mapping[str, Any], seconds: float) -> str:
    """One demo design in a few lines."""
    model, program, shipped = found.model, found.program, found.shipped
    with working_bits(128):
        form = closed_form(model.response_modes(), model.feedthrough())
    agreement = "equal integer for integer" if stop["equal"] else "DIFFERS from the simulator"
    lines = [
        headline(found),
        _row("  model", f"order {model.order}; h(t) = {form}"),
        _row("  sampled", f"{found.sampled.method} at {exact_text(found.sampled.rate_hz)} Hz, {_delay_text(found)}"),
        _row(
            "  integers",
            f"{program.data_bits}-bit data, {program.coefficient_bits}-bit coefficients, "
            f"{len(program.sections)} section{'s' if len(program.sections) > 1 else ''}; impulse error "
            f"{100 * shipped.impulse.peak:.3g} % peak, {100 * shipped.impulse.rms:.3g} % r.m.s.",
        ),
        _row("  C", f"{stop['c_lines']} lines; compiled by {stop['compiler']}; {stop['samples']} samples {agreement}"),
        _row("  time", f"{seconds:.2f} s"),
        "",
    ]
    return "\n".join(lines)


def _delay_text(found: Assessment) -> str:
    total = found.model.dead_time_s * found.sampled.rate_hz
    return "no dead time" if total == 0 else f"{exact_text(total)} samples of dead time"


def targets_text(profiles: Iterable[TargetProfile]) -> str:
    """A table of profiles."""
    lines = [f"{'name':<14}{'word':>5}{'int':>5}  {'products in one instruction':<58}title"]
    lines += [
        f"{p.name:<14}{p.word_bits:>5}{p.int_bits:>5}  {', '.join(p.multipliers) or 'none':<58}{p.title}"
        for p in profiles
    ]
    return "\n".join(lines)
