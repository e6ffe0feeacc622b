"""What relaxing saved and what had to stay, as text and as data."""

from typing import Any

from attrs import asdict

from afterkick.fixed.program import Overflow
from afterkick.fixed.ranges import analyse
from afterkick.fixed.relax import Relaxation
from afterkick.fixed.structures import operations

__all__ = ["relaxation_data", "relaxation_rows"]


def relaxation_data(relaxation: Relaxation) -> dict[str, Any]:
    """For JSON; ``input_codes`` is null and ``ranges`` empty where there was nothing to save."""
    after = relaxation.after
    codes = analyse(after).proved.get(after.input)
    return {
        "operations": {"before": operations(relaxation.before), "after": operations(after)},
        "unchecked": list(relaxation.unchecked),
        "narrowed_sums": list(relaxation.narrowed),
        "shortened_words": list(relaxation.shortened),
        "folded": list(relaxation.folded),
        "stays": {
            "checked": list(relaxation.checked),
            "wide_sums": list(relaxation.wide),
            "carried": list(relaxation.carried),
        },
        "input_codes": None if codes is None else [codes.lowest, codes.highest],
        "ranges": [] if after.proof is None else [asdict(entry) for entry in after.proof.ranges],
    }


def relaxation_rows(relaxation: Relaxation) -> list[tuple[str, str]]:
    """(label, text) for the terminal: what was saved and what that is worth, and what stays."""
    rule = "saturation" if relaxation.before.overflow is Overflow.SATURATE else "wrapping"
    saved = _listed(
        (f"no {rule} of", relaxation.unchecked),
        ("32-bit sums for", relaxation.narrowed),
        ("32-bit words for", relaxation.shortened),
        ("error feedback in a coefficient of", relaxation.folded),
    )
    stays = _listed(
        (f"{rule} of", relaxation.checked),
        ("64-bit sums for", relaxation.wide),
        ("error feedback of", relaxation.carried),
    )
    worth = f"{operations(relaxation.after)} operations instead of {operations(relaxation.before)} (estimate)"
    why = "" if relaxation.before.preset is None else ", as a preset may start the filter where no proof holds"
    rows = [("  relaxed", f"{worth}: {saved}" if saved else f"nothing saved{why}")]
    return [*rows, ("", f"stays: {stays}")] if stays else rows


def _listed(*groups: tuple[str, tuple[str, ...]]) -> str:
    return "; ".join(f"{what} {_and(names)}" for what, names in groups if names)


def _and(names: tuple[str, ...]) -> str:
    return " and ".join([*([", ".join(names[:-1])] if names[1:] else []), names[-1]])
