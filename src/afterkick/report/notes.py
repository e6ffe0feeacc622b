"""What the emitted header says about accuracy."""

from afterkick.report.formulas import number
from afterkick.verdict import Assessment

__all__ = ["emitted_notes"]


def emitted_notes(found: Assessment) -> tuple[str, ...]:
    """A few lines; figures to three digits, so that they change only when the filter does."""
    shipped, model = found.shipped, found.model
    lines = [
        f"Model: order {model.order}, {model.stability}; sampled by {found.sampled.method}.",
        "Against the continuous model, output rounding left out (estimates):",
        f"  impulse response: peak {number(100 * shipped.impulse.peak, 3)} %, "
        f"r.m.s. {number(100 * shipped.impulse.rms, 3)} % of the analytic one;",
        f"  up to {number(shipped.band.up_to_hz)} Hz: {number(abs(shipped.band.magnitude_db), 3)} dB, "
        f"{number(abs(shipped.band.phase_deg), 3)} degrees.",
    ]
    if shipped.dc_gain_relative is not None:
        lines.append(f"  gain at 0 Hz: {number(1e6 * shipped.dc_gain_relative, 3)} ppm off.")
    lines.append(f"Budget of the design file: {found.verdict}.")
    return tuple(lines)
