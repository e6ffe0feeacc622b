"""Where steps of several sizes settle, as text and as data."""

from collections.abc import Sequence
from typing import Any

from afterkick.fixed.settled import StepOffset
from afterkick.report.formulas import counted

__all__ = ["settled_data", "settled_rows"]


def settled_data(steps: Sequence[StepOffset]) -> list[dict[str, Any]]:
    """For JSON; counts of the output, ``period`` is null where the program had not begun to repeat itself."""
    return [
        {
            "input_code": step.code,
            "gain_times_input": step.wanted,
            "from_coefficients": step.from_coefficients,
            "offset_bound": [step.lowest, step.highest],
            "offset_simulated": [step.simulated_lowest, step.simulated_highest],
            "period": step.simulated.period,
            "samples": step.simulated.samples,
        }
        for step in steps
    ]


def settled_rows(steps: Sequence[StepOffset]) -> list[tuple[str, str]]:
    """(label, text) for the terminal; nothing where there are no steps."""
    if not steps:
        return []
    bound = max(step.largest for step in steps)
    coefficients = max(abs(step.from_coefficients) for step in steps)
    lowest = min(step.simulated_lowest for step in steps)
    highest = max(step.simulated_highest for step in steps)
    proved = f"a step settles within {bound:.4g} counts of DC gain times input"
    gain = f"; the coefficients put that off by at most {coefficients:.3g}" if coefficients else ", which is exact"
    seen = f"simulated, {counted(len(steps), 'step')} from 1 to {max(step.code for step in steps)} counts: "
    seen += f"{lowest:.4g} to {highest:.4g} counts"
    late = [step.simulated.samples for step in steps if step.simulated.period is None]
    if late:
        seen += f"; {len(late)} of them not yet periodic after {max(late)} samples"
    return [("  settled", proved + gain), ("", seen)]
