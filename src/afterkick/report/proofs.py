"""What is proved about the integers, as text and as data."""

from math import isfinite
from typing import Any

from afterkick.fixed.bounds import Bounds
from afterkick.fixed.program import Program
from afterkick.numbers import nearest_float
from afterkick.report.formulas import counted

__all__ = ["proof_data", "proof_rows"]

ROOM = 1.001
"""What a remedy leaves for roundings."""


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
            }
            for word in bounds.words
        ],
        "output_counts": None
        if output is None
        else {
            "coefficients": output.coefficients,
            "rounding": output.rounding,
            "sampling": output.sampling,
            "total": output.total,
        },
        "dead_band_counts": bounds.dead_band,
        "noise_rms_estimate": bounds.noise_rms,
        "peak_reached": None
        if reached is None
        else {"bound": reached.bound, "simulated": reached.simulated, "ratio": reached.ratio},
    }


def proof_rows(bounds: Bounds, program: Program) -> list[tuple[str, str]]:
    """(label, text) for the terminal."""
    rows = []
    if bounds.proved:
        fullest = max(bounds.words, key=lambda word: word.filling)
        text = f"no word overflows for any input up to {bounds.peak_code} counts; the fullest is {fullest.word}, "
        rows.append(("bounds", f"{text}{100 * fullest.filling:.4g} % full"))
    else:
        rows.append(("bounds", f"nothing is proved: {bounds.why_not}"))
        rows += [("", remedy) for remedy in _remedies(bounds, program)]
    if bounds.output is not None:
        out = bounds.output
        parts = f"coefficients {out.coefficients:.4g} + rounding {out.rounding:.4g} + sampling {out.sampling:.4g}"
        rows.append(("  output", f"off by at most {out.total:.4g} counts = {parts}"))
        rest = counted(int(bounds.dead_band or 0), "count")
        rows.append(("  at rest", f"within {rest} of 0 long after the input has gone"))
    if bounds.noise_rms is not None:
        rows.append(("  noise", f"{bounds.noise_rms:.3g} counts r.m.s. (estimate)"))
    if bounds.peak_reached is not None:
        reached = bounds.peak_reached
        text = f"the worst input, simulated, drives the output to {reached.simulated:.0f} of {reached.bound:.4g} counts"
        rows.append(("  reached", f"{text} ({100 * reached.ratio:.2f} %)"))
    return rows


def _remedies(bounds: Bounds, program: Program) -> list[str]:
    """What would make the proof go through, where that is a matter of scale."""
    remedies = []
    for word in bounds.overflowing:
        if not isfinite(word.filling):
            continue
        if word.word == program.output:
            needed = nearest_float(program.output_format.full_scale) * word.filling * ROOM
            size = f"{needed:.4g} {program.output_format.unit}".rstrip()
            remedies.append(f"remedy: an output full_scale of {size} or more, or a smaller peak")
        elif not remedies:
            peak = nearest_float(program.input_format.peak) / word.filling / ROOM
            size = f"{peak:.4g} {program.input_format.unit}".rstrip()
            remedies.append(f"remedy for {word.word}: promise an input peak of {size} or less")
    return remedies


def _finite(value: float) -> float | None:
    return value if isfinite(value) else None
