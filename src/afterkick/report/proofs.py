"""What is proved about the integers, as text and as data."""

from math import isfinite
from typing import Any

from afterkick.fixed.bounds import Bounds, WordRange

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


def proof_rows(bounds: Bounds) -> list[tuple[str, str]]:
    """(label, text) for the terminal."""
    rows = []
    fullest = max(bounds.words, key=_filling)
    noise = "" if bounds.noise_rms is None else f"; noise {bounds.noise_rms:.3g} counts r.m.s. (estimate)"
    if bounds.proved:
        rows.append(("bounds", f"no word overflows for any input up to {bounds.peak_code} counts"))
    else:
        rows.append(("bounds", f"nothing is proved: {bounds.why_not}"))
    if isfinite(_filling(fullest)):
        rows.append(("  fullest", f"{fullest.word} at {100 * _filling(fullest):.4g} % of its word"))
    if bounds.output is not None:
        out = bounds.output
        rows.append(
            (
                "  output",
                f"off by at most {out.total:.4g} counts = coefficients {out.coefficients:.4g} + rounding "
                f"{out.rounding:.4g} + sampling {out.sampling:.4g}",
            )
        )
        rows.append(("  at rest", f"within {bounds.dead_band:.0f} counts of 0 long after the input has gone{noise}"))
    elif noise:
        rows.append(("  noise", noise.removeprefix("; noise ")))
    if bounds.peak_reached is not None:
        reached = bounds.peak_reached
        text = f"the worst input found reaches {reached.simulated:.0f} of {reached.bound:.4g} counts"
        rows.append(("  reached", f"{text} ({100 * reached.ratio:.2f} %)"))
    return rows


def _filling(word: WordRange) -> float:
    return max(word.highest / word.capacity_high, word.lowest / word.capacity_low)


def _finite(value: float) -> float | None:
    return value if isfinite(value) else None
