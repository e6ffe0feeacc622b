"""Model + [sampling] -> Sampled, or the reasons why not."""

from collections.abc import Callable
from fractions import Fraction

from flint import acb, arb, fmpq

from afterkick.design.schema import Sampling
from afterkick.errors import Problem, Refused
from afterkick.model.model import Model
from afterkick.model.roots import Root
from afterkick.numbers import certified, fraction, is_exactly_zero, mid_float
from afterkick.sampling.holds import INVARIANT_METHODS, invariant_transfer
from afterkick.sampling.maps import (
    backward_difference_transfer,
    bilinear_constant,
    bilinear_transfer,
    matched_transfer,
)
from afterkick.sampling.pulse_transfer import PulseTransfer
from afterkick.sampling.sampled import Sampled

__all__ = ["aliased_hz", "sample"]


def sample(model: Model, options: Sampling) -> Sampled:
    """The sampled filter of a model.

    :raises Refused: an improper model or a fraction of a sample of dead time with a method that can't take it, a pole
        that the method maps to infinity, a match frequency where the model has a zero or a pole.
    """
    whole = int((model.dead_time_s * options.rate_hz).floor())
    rest = model.dead_time_s - whole / options.rate_hz
    problems = [*_improper(model, options), *_fractional(model, options, rest)]
    if not problems:
        problems = [
            *_mapped_to_infinity(model, options),
            *_unmatchable(model, options),
            *_folded_to_zero(model, options),
        ]
    if problems:
        raise Refused(problems)
    return Sampled(model, options, whole, rest, _method(model, options, rest), tuple(_fast_modes(model, options)))


def _method(model: Model, options: Sampling, rest: fmpq) -> Callable[[], PulseTransfer | None]:
    period = 1 / options.rate_hz
    match options.method:
        case "bilinear":
            return lambda: bilinear_transfer(model, period, options.match_hz)
        case "backward-difference":
            return lambda: backward_difference_transfer(model, period)
        case "matched":
            return lambda: matched_transfer(model, period, options.match_hz, options.zeros_at_infinity or "half-rate")
        case _:
            first_sample = options.first_sample or "half"
            return lambda: invariant_transfer(model, options.method, period, rest, first_sample)


def _improper(model: Model, options: Sampling) -> list[Problem]:
    if model.relative_degree >= 0 or options.method in ("bilinear", "backward-difference"):
        return []
    return [
        Problem(
            "sampling.method",
            f"{options.method} on an improper model ({model.order - model.relative_degree} zeros, {model.order} poles)",
            "bilinear or backward-difference, which map it to a proper filter",
            "add a pole above the band (for a pid: derivative_corner_hz), or take one of those methods",
        )
    ]


def _fractional(model: Model, options: Sampling, rest: fmpq) -> list[Problem]:
    if rest == 0:
        return []
    samples = f"{float(fraction(model.dead_time_s * options.rate_hz)):.6g} samples"
    whole = max(1, round(fraction(model.dead_time_s * options.rate_hz)))
    remedy = f"zero-order-hold, or rate_hz = {_short(whole / model.dead_time_s)}, where it is {whole} whole samples"
    if options.method not in INVARIANT_METHODS:
        return [Problem("sampling.method", f"a dead time of {samples} with {options.method}", "whole samples", remedy)]
    if options.method == "impulse-invariant" and model.relative_degree == 0:
        found = f"a dead time of {samples} with impulse-invariant on a model with feedthrough"
        return [Problem("sampling.method", found, "whole samples: the Dirac part must fall on a sample", remedy)]
    return []


def _short(value: fmpq) -> str:
    exact = fraction(value)
    return str(exact) if exact.denominator == 1 else f"{float(exact):.9g}"


def _mapped_to_infinity(model: Model, options: Sampling) -> list[Problem]:
    """A real pole at K (bilinear) or at the rate (backward difference) has no image."""
    if options.method == "bilinear":
        image, name = bilinear_constant(1 / options.rate_hz, options.match_hz), "2/T"
    elif options.method == "backward-difference":
        image, name = arb(options.rate_hz), "1/T"
    else:
        return []
    return [
        Problem(
            "sampling.rate_hz",
            f"{options.method} with a pole at {root.text()}, which is {name} at {_short(options.rate_hz)} Hz",
            f"a rate that keeps every pole away from {name}",
            f"rate_hz = {_short(options.rate_hz * 2)}, or zero-order-hold",
        )
        for root in model.poles
        if root.real and root.evaluate().real.overlaps(image)
    ]


def _unmatchable(model: Model, options: Sampling) -> list[Problem]:
    """The gain can't be matched where the model has none, or has no bound."""
    if options.method != "matched" or options.match_hz is None:
        return []
    at = acb(0, 2 * arb.pi() * options.match_hz)
    return [
        Problem(
            "sampling.match_hz",
            f"{_short(options.match_hz)} Hz, where the model has a {kind} on the imaginary axis",
            "a frequency where the model's gain is neither zero nor without bound",
            "a frequency in the pass band, or no match_hz (the gain is then matched at 0 Hz)",
        )
        for kind, roots in (("zero", model.zeros), ("pole", model.poles))
        for root in roots
        if root.evaluate().overlaps(at)
    ]


def _folded_to_zero(model: Model, options: Sampling) -> list[Problem]:
    """An undamped mode at a multiple of the rate is a constant to the samples; so is a matched zero there."""
    suspects = [("mode", root) for root in model.poles if options.method in (*INVARIANT_METHODS, "matched")]
    suspects += [("zero", root) for root in model.zeros if options.method == "matched"]
    return [
        Problem(
            "sampling.rate_hz",
            f"{options.method} with an undamped {kind} at {folded[0]:.6g} Hz, a multiple of the rate",
            f"a rate that is not the {kind}'s frequency divided by a whole number",
            f"a rate above {2 * folded[0]:.6g} Hz",
        )
        for kind, root in suspects
        if not root.real and is_exactly_zero(root.evaluate().real)
        if (folded := aliased_hz(root, options.rate_hz)) and folded[1] == 0.0
    ]


def aliased_hz(root: Root, rate_hz: fmpq) -> tuple[float, float] | None:
    """Frequency of a mode at or above half the rate, and where sampling folds it to; None for a slower mode."""

    def ratio() -> arb:
        return abs(root.evaluate().imag) / (2 * arb.pi() * rate_hz)

    def decided(value: arb) -> bool:
        return bool(value < 0.5) or bool(value > 0.5) or bool(value.rad() < arb(2) ** -100)

    cycles = certified(ratio, decided, "a mode's frequency")
    if cycles < 0.5:
        return None
    rate = float(Fraction(int(rate_hz.numerator), int(rate_hz.denominator)))
    value = mid_float(cycles)
    off = cycles - round(value)
    return value * rate, 0.0 if off.contains(0) else abs(mid_float(off)) * rate


def _fast_modes(model: Model, options: Sampling) -> list[str]:
    warnings = []
    for root in model.poles:
        folded = None if root.real else aliased_hz(root, options.rate_hz)
        if folded is None:
            continue
        frequency, image = folded
        where = f"the mode at {frequency:.6g} Hz is at or above half the rate ({_short(options.rate_hz / 2)} Hz)"
        if options.method in (*INVARIANT_METHODS, "matched"):
            warnings.append(f"{where}: sampled, it shows up at {image:.6g} Hz")
        else:
            warnings.append(f"{where}: {options.method} moves it below")
    return warnings
