"""The end of the road: everything found about one design, judged against its budget."""

from collections.abc import Sequence
from functools import cache, cached_property
from typing import TYPE_CHECKING

from attrs import frozen
from flint import fmpq

from afterkick.design.digest import digest
from afterkick.design.schema import Design, Sampling
from afterkick.errors import Refused
from afterkick.fixed.arrangement import Arranged, arranged
from afterkick.fixed.bounds import Bounds, bounds
from afterkick.fixed.choice import ChoiceReport, choice_report
from afterkick.fixed.program import Program, quantised_dc_gain
from afterkick.fixed.realised import realised
from afterkick.fixed.relax import Relaxation
from afterkick.fixed.settled import StepOffset, settled_offsets, step_codes
from afterkick.fixed.structures import CARRIED, Candidate, candidates, chosen
from afterkick.model.forms import model_of
from afterkick.model.model import Model
from afterkick.numbers import fraction
from afterkick.sampling import Sampled, sample
from afterkick.sampling.response_errors import ResponseErrors, response_errors

if TYPE_CHECKING:
    from afterkick.floating import FloatEstimates, FloatProgram

__all__ = ["Assessment", "BudgetLine", "FixedPoint", "SinglePrecision", "assess"]

HOLDS, FALLS_SHORT, UNKNOWN = "holds", "falls short", "unknown"


@frozen
class BudgetLine:
    """One line of [budget] and what was found."""

    item: str
    limit: float
    found: float | None
    """In the unit of the item's name; None where it was not judged."""
    remark: str = ""
    judged_by: str = ""
    """The command that judges the line, where it is not this road: the verdict leaves it out."""

    @property
    def holds(self) -> bool | None:
        """Whether the limit is kept; None where it was not judged."""
        return None if self.found is None else self.found <= self.limit


@frozen(eq=False)
class FixedPoint:
    """What ships as integers."""

    program: Program
    dc_gain: fmpq | None
    """Of the integer coefficients, exact; None with an integrator."""
    choice: ChoiceReport | None
    """What the choice of the integers gained and kept; None for structures whose coefficients are others."""
    tried: tuple[Candidate, ...]
    """For structure "auto": every structure with its cost, the cheapest first."""
    bounds: Bounds
    relaxation: Relaxation | None
    """What the proof saved; None where the design doesn't ask for it."""
    settled: tuple[StepOffset, ...]
    """Steps of several sizes; none where nothing is proved, or the filter integrates."""
    arrangement: Arranged | None
    """Of the sections, where it is not that of the rule."""


@frozen(eq=False)
class SinglePrecision:
    """What ships as singles."""

    program: "FloatProgram"
    estimates: "FloatEstimates"


@frozen(eq=False)
class Assessment:
    """One design after the whole road."""

    design: Design
    model: Model
    sampled: Sampled
    digest: str
    errors: ResponseErrors
    """Of the exact sampled filter against the continuous model."""
    realisation: FixedPoint | SinglePrecision
    """What ``arithmetic.kind`` asks for."""
    shipped: ResponseErrors
    """Of the filter with the stored coefficients against the continuous model; the rounding of results is left out."""
    budget: tuple[BudgetLine, ...]

    @cached_property
    def verdict(self) -> str:
        """``holds``, ``falls short``, or ``unknown`` where no line falls short but one was not judged."""
        judged = [line.holds for line in self.budget if not line.judged_by]
        if False in judged or self.sampled.model.stability == "unstable":
            return FALLS_SHORT
        return UNKNOWN if None in judged else HOLDS


def assess(design: Design) -> Assessment:
    """Walk the road: model, sampled, program, errors, budget.

    :raises Refused: what can't be done, naming the key and a remedy.
    """
    model = model_of(design)
    sampled = sample(model, design.sampling)
    mark = digest(design)
    realise = _single_precision if design.arithmetic.kind == "float32" else _fixed_point
    realisation, shipped, budget = realise(design, sampled, mark)
    errors = response_errors(sampled, design.budget.band_hz)
    if isinstance(realisation, FixedPoint) and realisation.arrangement is not None:
        sampled = realisation.arrangement.sampled
    return Assessment(design, model, sampled, mark, errors, realisation, shipped, tuple(budget))


def _fixed_point(
    design: Design, sampled: Sampled, mark: str
) -> tuple[FixedPoint, ResponseErrors, Sequence[BudgetLine]]:
    model = sampled.model
    held = _held(model, sampled)

    @cache
    def judged(program: Program) -> tuple[ResponseErrors, Bounds, Sequence[BudgetLine]]:
        shipped = response_errors(realised(program, sampled), design.budget.band_hz)
        proofs = bounds(program, sampled, held)
        return shipped, proofs, _budget_lines(design, model, shipped, _proved_figures(proofs))

    def shortfalls(program: Program) -> list[str]:
        return [line.item for line in judged(program)[2] if not line.holds and not line.judged_by]

    def listed_for(filtered: Sampled) -> tuple[Candidate, ...]:
        road = (filtered, design.arithmetic, design.signals, design.design.name)
        return candidates(*road, title=design.design.title, digest=mark, judge=shortfalls)

    # the other structures keep more bits between the sections
    rounds_between = design.arithmetic.structure in (*CARRIED, "auto")
    arrangement = arranged(sampled, design.arithmetic, design.signals) if rounds_between else None
    try:
        listed = listed_for(sampled if arrangement is None else arrangement.sampled)
    except Refused:
        if arrangement is None:
            raise
        arrangement, listed = None, listed_for(sampled)
    in_sections = sampled if arrangement is None else arrangement.sampled
    program = chosen(listed)
    shipped, proofs, budget = judged(program)
    found = FixedPoint(
        program,
        quantised_dc_gain(program),
        choice_report(program, in_sections) if program.structure in CARRIED else None,
        listed if design.arithmetic.structure == "auto" else (),
        proofs,
        next(one.relaxation for one in listed if one.program is program),
        settled_offsets(program, sampled, proofs.rounding, step_codes(program, proofs.peak_code))
        if proofs.rounding is not None
        else (),
        arrangement,
    )
    return found, shipped, budget


def _single_precision(
    design: Design, sampled: Sampled, mark: str
) -> tuple[SinglePrecision, ResponseErrors, Sequence[BudgetLine]]:
    from afterkick.floating import float_estimates, float_program, realised_float  # fixed point pays nothing for it

    program = float_program(
        sampled,
        design.signals,
        design.design.name,
        title=design.design.title,
        digest=mark,
        flush_below=design.arithmetic.flush_below,
    )
    shipped = response_errors(realised_float(program, sampled), design.budget.band_hz)
    found = SinglePrecision(program, float_estimates(program, sampled))
    return found, shipped, _budget_lines(design, sampled.model, shipped, {})


def _held(model: Model, sampled: Sampled) -> Sampled | None:
    """What the model does to a staircase: its zero-order-hold sampling; None where that can't be had."""
    if sampled.method == "zero-order-hold" or model.relative_degree < 0:
        return None
    return sample(model, Sampling(rate_hz=sampled.rate_hz, method="zero-order-hold"))


def _budget_lines(
    design: Design, model: Model, shipped: ResponseErrors, counts: dict[str, tuple[float | None, str]]
) -> list[BudgetLine]:
    """The lines that the file gives; what ships is judged, and ``counts`` are the figures in output counts."""
    band = shipped.band
    found: dict[str, tuple[float | None, str]] = {
        **_impulse_figures(shipped),
        "magnitude_db": _largest(band.magnitude_db, band.magnitude_at_hz),
        "phase_deg": _largest(band.phase_deg, band.phase_at_hz),
        "dc_gain_ppm": _dc_gain_ppm(model, shipped),
    }
    found |= counts
    limits = {item: getattr(design.budget, item) for item in found}
    lines = [
        BudgetLine(item, float(fraction(limit)), *found[item]) for item, limit in limits.items() if limit is not None
    ]
    if design.budget.instructions is not None:
        limit = float(fraction(design.budget.instructions))
        lines.append(BudgetLine("instructions", limit, None, judged_by="bench"))
    return lines


def _proved_figures(proofs: Bounds) -> dict[str, tuple[float | None, str]]:
    noise = (proofs.noise_rms, "estimate" if proofs.noise_rms is not None else proofs.why_not)
    if proofs.output is None:
        nothing = (None, proofs.why_not if proofs.unbounded else f"no bound: {proofs.why_not}")
        return {"worst_case_counts": nothing, "noise_counts": noise, "dead_band_counts": nothing}
    while_linear = ", while no clamp acts" if proofs.clamped else ""
    worst: tuple[float | None, str] = (proofs.output.total, f"bound, staircase inputs{while_linear}")
    if proofs.output.growth:
        worst = (None, f"no bound: it grows by up to {proofs.output.growth:.3g} counts a sample")
    about = "" if proofs.integration is None else ", about the value that is held"
    return {"worst_case_counts": worst, "noise_counts": noise, "dead_band_counts": (proofs.dead_band, f"bound{about}")}


def _impulse_figures(shipped: ResponseErrors) -> dict[str, tuple[float | None, str]]:
    impulse = shipped.impulse
    if impulse is None:
        improper = "an improper model has no impulse response to compare with"
        return {"impulse_peak_percent": (None, improper), "impulse_rms_percent": (None, improper)}
    peak, rms, aligned = (
        None if value is None else 100 * value for value in (impulse.peak, impulse.rms, impulse.peak_aligned)
    )
    nothing = "the analytic response is zero at every sample"
    delay = impulse.delay_samples
    late = "" if aligned is None or not delay else f"{aligned:.2g} % apart from a delay of {delay:.3g} T"
    return {
        "impulse_peak_percent": (peak, nothing if peak is None else late),
        "impulse_rms_percent": (rms, nothing if rms is None else ""),
    }


def _largest(value: float | None, at_hz: float | None) -> tuple[float | None, str]:
    if value is None:
        return None, "no frequency of the band has a figure"
    return abs(value), f"largest at {at_hz:.4g} Hz"


def _dc_gain_ppm(model: Model, shipped: ResponseErrors) -> tuple[float | None, str]:
    if model.poles_at_origin:
        assert shipped.growth_relative is not None
        return 1e6 * abs(shipped.growth_relative), "of the growth: the model integrates"
    if shipped.dc_gain_relative is None:
        return 0.0, "zero at 0 Hz is kept exactly"
    return 1e6 * abs(shipped.dc_gain_relative), ""
