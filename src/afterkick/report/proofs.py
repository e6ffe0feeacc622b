"""What is proved about the integers, as text and as data."""

from math import isfinite
from typing import Any

from afterkick.fixed.bounds import Bounds, Integration
from afterkick.fixed.program import Program, quantised_dc_gain
from afterkick.fixed.remedies import scale_remedies
from afterkick.numbers import nearest_float
from afterkick.report.formulas import counted

__all__ = ["proof_data", "proof_rows"]


def proof_data(bounds: Bounds) -> dict[str, Any]:
    """For JSON: bounds are rigorous, ``noise_rms_estimate`` says what it is."""
    output = bounds.output
    reached = bounds.peak_reached
    return {
        "proved": bounds.proved,
        "why_not": bounds.why_not,
        "peak_code": bounds.peak_code,
        "words": [
            {
                "word": word.word,
                "lowest": _finite(word.lowest),
                "highest": _finite(word.highest),
                "capacity": [word.capacity_low, word.capacity_high],
                "fits": word.fits,
                "clamped": word.clamped,
            }
            for word in bounds.words
        ],
        "sums": [
            {"word": one.word, "partial_sum": one.partial_sum, "accumulator_bits": one.accumulator_bits}
            for one in bounds.sums
        ],
        "output_counts": None
        if output is None
        else {
            "coefficients": output.coefficients,
            "rounding": output.rounding,
            "sampling": output.sampling,
            "total": output.total,
            "growth_per_sample": output.growth,
        },
        "dead_band_counts": bounds.dead_band,
        "integration": None
        if bounds.integration is None
        else {
            "word": bounds.integration.word,
            "held_counts": [bounds.integration.lowest, bounds.integration.highest],
            "smallest_code": bounds.integration.smallest_code,
            "counts_per_sample_and_code": bounds.integration.per_sample,
        },
        "noise_rms_estimate": bounds.noise_rms,
        "peak_reached": None
        if reached is None
        else {"bound": reached.bound, "simulated": reached.simulated, "ratio": reached.ratio},
    }


def proof_rows(bounds: Bounds, program: Program) -> list[tuple[str, str]]:
    """(label, text) for the terminal."""
    rows = []
    if bounds.proved:
        text = f"no word overflows for any input up to {bounds.peak_code} counts"
        free = [word for word in bounds.words if not word.clamped]
        if free:
            fullest = max(free, key=lambda word: word.filling)
            text += f"; the fullest is {fullest.word}, {100 * fullest.filling:.4g} % full"
        fullest_sum = max(bounds.sums, key=lambda one: one.filling)
        text += f"; the fullest sum, for {fullest_sum.word}, takes {fullest_sum.bits} of"
        text += f" {fullest_sum.accumulator_bits} bits"
        rows.append(("bounds", text))
        if bounds.clamped:
            names = ", ".join(word.word for word in bounds.clamped)
            rows.append(("  clamp", f"holds {names}; the output is at most {_ends(bounds, program)} counts"))
    else:
        rows.append(("bounds", f"nothing is proved: {bounds.why_not}"))
        rows += [("", f"remedy: {remedy}") for remedy in scale_remedies(bounds.overflowing, program)]
        if quantised_dc_gain(program) is None and program.structure != "parallel":
            remedy = 'structure = "parallel" keeps what integrates apart, in a wide state that a clamp holds'
            rows.append(("", f"remedy: {remedy}"))
    if bounds.output is not None:
        out = bounds.output
        parts = f"coefficients {out.coefficients:.4g} + rounding {out.rounding:.4g} + sampling {out.sampling:.4g}"
        when = "while no clamp acts, " if bounds.clamped else ""
        rows.append(("  output", f"{when}off by at most {out.total:.4g} counts = {parts}"))
        if out.growth:
            rows.append(("", f"and {out.growth:.3g} counts more for each sample that the worst input lasts"))
        rest = counted(int(bounds.dead_band or 0), "count")
        what = "0" if bounds.integration is None else "the value that it holds"
        rows.append(("  at rest", f"within {rest} of {what} long after the input has gone"))
    if bounds.integration is not None:
        rows += _integration_rows(bounds.integration, program)
    if bounds.noise_rms is not None:
        rows.append(("  noise", f"{bounds.noise_rms:.3g} counts r.m.s. (estimate)"))
    if bounds.peak_reached is not None:
        reached = bounds.peak_reached
        text = f"the worst input, simulated, drives the output to {reached.simulated:.0f} of {reached.bound:.4g} counts"
        rows.append(("  reached", f"{text} ({100 * reached.ratio:.2f} %)"))
    return rows


def _ends(bounds: Bounds, program: Program) -> str:
    output = next(word for word in bounds.words if word.word == program.output)
    return f"{output.lowest:.0f} to {output.highest:.0f}"


def _integration_rows(found: Integration, program: Program) -> list[tuple[str, str]]:
    """What is lost, and how fast it goes."""
    code = nearest_float(program.input_format.full_scale) / 2 ** (program.data_bits - 1)
    unit = program.input_format.unit
    smallest = f"{counted(found.smallest_code, 'count')} ({found.smallest_code * code:.4g} {unit}".rstrip() + ")"
    samples = 1 / found.per_sample
    time_s = samples / nearest_float(program.rate_hz)
    return [
        ("  integral", f"the smallest constant input that is not lost is {smallest}"),
        ("", f"a constant input of 1 count moves the output by 1 count in {samples:.4g} samples, {time_s:.4g} s"),
    ]


def _finite(value: float) -> float | None:
    return value if isfinite(value) else None
