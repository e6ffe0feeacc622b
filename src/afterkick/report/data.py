"""What ``check`` and ``kick`` found as plain data, ready for JSON."""

from math import isfinite
from typing import Any

from attrs import asdict
from flint import arb

from afterkick.design.schema import Design
from afterkick.errors import Uncertified
from afterkick.model.model import Model
from afterkick.model.roots import Roots
from afterkick.numbers import fraction, mid_float, nearest_float, to_text, working_bits
from afterkick.report.formulas import closed_form
from afterkick.report.proofs import proof_data
from afterkick.report.relaxation import relaxation_data
from afterkick.report.response import Kick
from afterkick.report.settling import settled_data
from afterkick.sampling.response_errors import CONVENTION, ResponseErrors
from afterkick.sampling.sampled import Sampled
from afterkick.verdict import Assessment, FixedPoint, SinglePrecision

__all__ = ["REPORT_BITS", "check_data", "kick_data"]

REPORT_BITS = 80
"""Accuracy of printed section coefficients, in bits."""


def check_data(found: Assessment) -> dict[str, Any]:
    """One JSON object; ``b`` and ``a`` carry 17 significant digits, a[0] = 1."""
    design = found.design
    data = {
        "design": design.design.name,
        "title": design.design.title,
        "digest": found.digest,
        "verdict": found.verdict,
        "warnings": [*found.model.warnings, *found.sampled.warnings],
        "model": _model_data(found.model),
        "sampling": _sampling_data(found.sampled),
        "errors": _errors_data(found.errors),
        **_realisation_data(found),
        "budget": [
            {
                "item": line.item,
                "limit": line.limit,
                "found": line.found,
                "holds": line.holds,
                "remark": line.remark,
                "judged_by": line.judged_by or "check",
            }
            for line in found.budget
        ],
    }
    return {key: _finite(value) for key, value in data.items()}


def _finite(value: Any) -> Any:
    """Null where a figure is no finite number, as JSON has no word for it."""
    match value:
        case float():
            return value if isfinite(value) else None
        case dict():
            return {key: _finite(item) for key, item in value.items()}
        case list() | tuple():
            return [_finite(item) for item in value]
        case _:
            return value


def _roots_data(roots: Roots) -> list[dict[str, Any]]:
    return [
        {
            "re": mid_float(root.evaluate().real),
            "im": mid_float(root.evaluate().imag),
            "conjugate_too": not root.real,
            "times": times,
            "unit": "rad/s",
        }
        for root, times in roots.items()
    ]


def _model_data(model: Model) -> dict[str, Any]:
    dc_gain = model.dc_gain_ball()
    proper = model.relative_degree >= 0
    parameters = model.markov_parameters(model.order)[1:] if proper else []
    jumps = [0.0 if value.contains(0) else mid_float(value) for value in parameters] if proper else None
    before = [float(fraction(value)) for value in model.before] + [0.0] * (model.order - len(model.before))
    with working_bits(128):
        modes = model.response_modes() if proper else ()
        impulse = closed_form(modes, model.feedthrough()) if proper else None
        free = closed_form(model.free.modes(), arb(0)) if model.free is not None else None
    return {
        "order": model.order,
        "stability": model.stability,
        "poles": _roots_data(model.poles),
        "zeros": _roots_data(model.zeros),
        "cancelled": _roots_data(dict(model.cancelled)),
        "dc_gain": None if dc_gain is None else mid_float(dc_gain),
        "dc_gain_exact": None if model.dc_gain is None else str(fraction(model.dc_gain)),
        "feedthrough": mid_float(model.feedthrough()) if proper else None,
        "dead_time_s": float(fraction(model.dead_time_s)),
        "jumps": jumps,
        "before": before,
        "after": None if jumps is None else [b + j for b, j in zip(before, jumps, strict=False)],
        "impulse_response": impulse,
        "free_response": free,
    }


def _sampling_data(sampled: Sampled) -> dict[str, Any]:
    try:
        parallel = sampled.parallel(REPORT_BITS)
    except Uncertified:  # poles so near z = 0 that their residues are beyond any range
        parallel = None
    return {
        "rate_hz": float(fraction(sampled.rate_hz)),
        "method": sampled.method,
        "delay": sampled.delay_samples,
        "stability": "stable" if sampled.stable else "marginal" if sampled.marginal else "unstable",
        "sections": [
            {
                "b": [float(to_text(value)) for value in section.b],
                "a": [float(to_text(value)) for value in section.a],
                "a_at_one": float(to_text(section.a_at_one)),
            }
            for section in sampled.sections(REPORT_BITS)
        ],
        "parallel": None
        if parallel is None
        else {
            "direct": float(to_text(parallel[0])),
            "sections": [
                {"b": [float(to_text(v)) for v in section.b], "a": [float(to_text(v)) for v in section.a]}
                for section in parallel[1]
            ],
        },
    }


def _errors_data(errors: ResponseErrors) -> dict[str, Any]:
    return {"convention": CONVENTION, "kind": "estimate", **asdict(errors)}


def _realisation_data(found: Assessment) -> dict[str, Any]:
    """``fixed`` and ``bounds``, or ``float32``."""
    errors = _errors_data(found.shipped)
    match found.realisation:
        case FixedPoint() as fixed:
            proved = proof_data(fixed.bounds) | {"settled": settled_data(fixed.settled)}
            return {"fixed": _fixed_data(fixed) | {"errors": errors}, "bounds": proved}
        case SinglePrecision() as single:
            from afterkick.report.single import single_data  # fixed point pays nothing for it

            return {"float32": single_data(single) | {"errors": errors}}


def _fixed_data(found: FixedPoint) -> dict[str, Any]:
    program = found.program
    return {
        "kind": "fixed",
        "structure": program.structure,
        "data_bits": program.data_bits,
        "coefficient_bits": program.coefficient_bits,
        "carry": program.carry,
        "rounding": program.rounding.value,
        "overflow": program.overflow.value,
        "sections": [
            {
                "b": list(section.b),
                "b_fraction_bits": section.b_fraction_bits,
                "a": list(section.a),
                "a_fraction_bits": section.a_fraction_bits,
                "gain_log2": section.gain_log2,
                "coefficients": [asdict(coefficient) for coefficient in section.coefficients],
            }
            for section in program.sections
        ],
        "arrangement": None
        if found.arrangement is None
        else {
            "noise_rms_estimate_by_rule": found.arrangement.noise_by_rule,
            "noise_rms_estimate": found.arrangement.noise,
        },
        "tried": [
            {
                "structure": one.structure,
                "carry": one.carry,
                "operations": one.operations,
                "falls_short": None if one.falls_short is None else list(one.falls_short),
                "refused": [str(problem) for problem in one.refused],
                "taken": one.program is program,
            }
            for one in found.tried
        ],
        "relaxed": None if found.relaxation is None else relaxation_data(found.relaxation),
        "choice": None
        if found.choice is None
        else {
            "nearest_impulse_error": found.choice.nearest_error,
            "chosen_impulse_error": found.choice.chosen_error,
            "gave_way": [{"name": one.name, "section": one.section} for one in found.choice.gave_way],
        },
        "dc_gain": None if found.dc_gain is None else nearest_float(found.dc_gain),
        "dc_gain_exact": None if found.dc_gain is None else str(fraction(found.dc_gain)),
    }


def kick_data(design: Design, rows: Kick) -> dict[str, Any]:
    """The columns of ``kick`` as rows."""
    single = design.arithmetic.kind == "float32"
    names = ("n", "t", "analytic", "sampled", *(("float32", "output") if single else ("integer", "counts")))
    columns = (rows.n, rows.t, rows.analytic, rows.sampled, rows.shipped, rows.outputs)
    data = {
        "design": design.design.name,
        "rate_hz": float(fraction(design.sampling.rate_hz)),
        "method": design.sampling.method,
        "convention": CONVENTION,
        "dirac": rows.dirac,
        "improper": rows.improper,
        **({"amplitude": rows.amplitude} if single else {"clipped": rows.clipped, "amplitude_counts": rows.amplitude}),
        "rows": [dict(zip(names, row, strict=True)) for row in zip(*(c.tolist() for c in columns), strict=True)],
    }
    return {key: _finite(value) for key, value in data.items()}
