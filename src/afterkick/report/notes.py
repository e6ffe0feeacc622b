"""What the emitted header says about accuracy."""

from afterkick.report.formulas import number
from afterkick.verdict import Assessment, SinglePrecision

__all__ = ["emitted_notes"]


def emitted_notes(found: Assessment) -> tuple[str, ...]:
    """A few lines; figures to three digits, so that they change only when the filter does."""
    shipped, model = found.shipped, found.model
    impulse, band = shipped.impulse, shipped.band
    single = isinstance(found.realisation, SinglePrecision)
    rounding = "rounding of results" if single else "output rounding"
    lines = [
        f"Model: order {model.order}, {model.stability}; sampled by {found.sampled.method}.",
        f"Against the continuous model, {rounding} left out (estimates):",
    ]
    if impulse is not None and impulse.peak is not None and impulse.rms is not None:
        peak, rms = number(100 * impulse.peak, 3), number(100 * impulse.rms, 3)
        lines.append(f"  impulse response: peak {peak} %, r.m.s. {rms} % of the analytic one;")
    if band.magnitude_db is not None and band.phase_deg is not None:
        magnitude, phase = number(abs(band.magnitude_db), 3), number(abs(band.phase_deg), 3)
        lines.append(f"  up to {number(band.up_to_hz)} Hz: {magnitude} dB, {phase} degrees.")
    if shipped.dc_gain_relative is not None:
        lines.append(f"  gain at 0 Hz: {number(1e6 * shipped.dc_gain_relative, 3)} ppm off.")
    if isinstance(found.realisation, SinglePrecision):
        lines += _single_notes(found.realisation)
    lines.append(f"Budget of the design file: {found.verdict}.")
    return tuple(lines)


def _single_notes(found: SinglePrecision) -> list[str]:
    noise, tail = found.estimates.noise, found.estimates.tail
    unit = found.program.output_format.unit
    lines = []
    if noise is not None:
        size = f"{number(noise.rms, 3)} {unit}".rstrip()
        at = f"{number(noise.at_hz, 3)} Hz"
        lines.append(f"Rounding adds {size} r.m.s. to a sine of the promised peak at {at} (estimate).")
    if tail.after_impulse is not None and found.program.flush_below is None:
        lines.append(f"States are subnormal numbers from {tail.after_impulse} samples after an impulse (estimate).")
    return lines
