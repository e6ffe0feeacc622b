"""What ships as singles and what is known of it, as text and as data."""

from math import log10
from typing import Any

from attrs import asdict

from afterkick.emit.float_literals import single
from afterkick.floating.program import FloatProgramSection
from afterkick.numbers import fraction, nearest_float
from afterkick.report.formulas import counted, number
from afterkick.report.layout import row
from afterkick.verdict import SinglePrecision

__all__ = ["estimate_rows", "single_data", "single_lines"]


def single_data(found: SinglePrecision) -> dict[str, Any]:
    """For JSON: ``b`` and ``a`` are exactly the stored singles; a name says what is a bound and what an estimate."""
    program, estimates = found.program, found.estimates
    noise = estimates.noise
    return {
        "kind": "float32",
        "structure": "transposed",
        "flush_below": program.flush_below,
        "sections": [
            {
                "b": list(section.b),
                "a": list(section.a),
                "a_at_one": nearest_float(section.a_at_one),
                "numerator_scale": section.numerator_scale or None,
                "coefficients": [asdict(coefficient) for coefficient in section.coefficients],
            }
            for section in program.sections
        ],
        "dc_gain": None if estimates.dc_gain is None else nearest_float(estimates.dc_gain),
        "dc_gain_exact": None if estimates.dc_gain is None else str(fraction(estimates.dc_gain)),
        "bounds_without_rounding": {
            "output_peak": estimates.output_peak,
            "coefficient_error": estimates.coefficient_error,
            "flush_error": estimates.flush_error,
        },
        "estimates": {
            "noise": None if noise is None else asdict(noise),
            "tail": asdict(estimates.tail),
            "overflows": estimates.overflows,
            "cost": asdict(estimates.cost),
        },
    }


def single_lines(found: SinglePrecision) -> list[str]:
    """The stored coefficients."""
    rounding = "every product and every sum of two rounds to the nearest single, ties to even"
    lines = [row("float32", f"transposed direct form II; {rounding}")]
    return lines + [
        row(f"  section {k}", _section(section), formula=True)
        for k, section in enumerate(found.program.sections, start=1)
    ]


def _section(section: FloatProgramSection) -> str:
    b, a = (", ".join(_shortest(value) for value in values) for values in (section.b, section.a))
    worst = max((abs(coefficient.error_last_places) for coefficient in section.coefficients), default=0.0)
    at_one = number(nearest_float(section.a_at_one), 9)
    return f"b ({b}); a ({a}); 1+a1+a2 {at_one}; largest rounding {worst:.2f} last places"


def _shortest(value: float) -> str:
    """The digits that the C has."""
    return single(value).removesuffix("f").removesuffix(".0")


def estimate_rows(found: SinglePrecision) -> list[tuple[str, str]]:
    """(label, text) for the terminal, in the place of the integers' bounds."""
    source = found.program.input_format
    peak = _quantity(nearest_float(source.peak), source.unit)
    return [*_bound_rows(found, peak), *_noise_rows(found, peak), *_tail_rows(found, peak), _cost_row(found)]


def _bound_rows(found: SinglePrecision, peak: str) -> list[tuple[str, str]]:
    program, estimates = found.program, found.estimates
    unit, full_scale = program.output_format.unit, nearest_float(program.output_format.full_scale)
    rows = [("bounds", "nothing is bounded: the response does not decay")]
    if estimates.output_peak is not None:
        text = f"the output stays within {_quantity(estimates.output_peak, unit)} for any input up to {peak}"
        rows = [("bounds", f"{text}, roundings left out; its full scale is {_quantity(full_scale, unit)}")]
    if estimates.dc_gain is None:
        remedy = 'kind = "fixed" with structure = "parallel" keeps the growth of what integrates, and can clamp it'
        rows.append(("", f"remedy: {remedy}"))
    if estimates.coefficient_error is not None:
        most = _quantity(estimates.coefficient_error, unit)
        rows.append(("  output", f"off by at most {most} from the exact sampled filter's, roundings left out"))
    if program.flush_below is not None:
        error = estimates.flush_error
        most = "an unbounded error" if error is None else f"at most {_quantity(error, unit)}"
        rows.append(("  flushed", f"states below {number(program.flush_below)} become 0, which adds {most}"))
    return rows


def _noise_rows(found: SinglePrecision, peak: str) -> list[tuple[str, str]]:
    noise, rows = found.estimates.noise, []
    if noise is not None:
        rms = _quantity(noise.rms, found.program.output_format.unit)
        below = f": {20 * log10(noise.output_rms / noise.rms):.1f} dB below the output" if noise.rms > 0 else ""
        text = f"{rms} r.m.s. for a sine of {peak} at {number(noise.at_hz, 4)} Hz, where it is largest{below}"
        rows.append(("  noise", f"{text} (estimate)"))
    if found.estimates.overflows:
        text = f"a sine of {peak} goes beyond the largest single, 3.4e38: choose other units"
        rows.append(("  overflow", f"{text} (estimate)"))
    return rows


def _tail_rows(found: SinglePrecision, peak: str) -> list[tuple[str, str]]:
    """How long states stay normal numbers; nothing for a response that ends by itself or does not decay."""
    tail = found.estimates.tail
    if tail.after_impulse is None:
        return []
    held = "" if tail.after_step is None else f", {tail.after_step} after it was held"
    text = f"every state is below 2^-126 from {counted(tail.after_impulse, 'sample')} after one sample of {peak}{held}"
    if found.program.flush_below is not None:
        return [("  tail", f"{text}, if none were flushed (estimate)")]
    ends = {None: "", True: "; simulated, it stays there", False: "; simulated, it ends at 0"}[tail.sticks]
    return [("  tail", f"{text} (estimate){ends}")]


def _cost_row(found: SinglePrecision) -> tuple[str, str]:
    cost = found.estimates.cost
    parts = (counted(cost.products, "product"), counted(cost.sums, "sum"), counted(cost.states, "state"))
    each = f"{', '.join(parts)} a sample: {cost.instructions} instructions"
    return "  cost", f"{each} with single-precision hardware (estimate)"


def _quantity(value: float, unit: str) -> str:
    return f"{number(value, 4)} {unit}".rstrip()
