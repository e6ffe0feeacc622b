"""Rules between the keys of a table, and between tables.

A rule sees what could be read: each field of the table, None where it is absent or wrong itself, so that a problem
elsewhere hides none here.  ``given`` are the keys that the file writes.  It yields problems whose key path starts at
the table.
"""

from collections.abc import Callable, Iterator
from collections.abc import Set as AbstractSet
from types import SimpleNamespace
from typing import Any, TypeAlias

import attrs
from flint import fmpq

from afterkick.design.limits import HIGHEST_ORDER, describe, plain
from afterkick.design.schema import (
    Arithmetic,
    Bandpass,
    Bandstop,
    Budget,
    Design,
    Highpass,
    Lag,
    Lowpass,
    MatricesForm,
    OdeForm,
    Pid,
    RootsForm,
    Sampling,
    Signals,
)
from afterkick.errors import Problem

__all__ = ["RULES", "Rule"]

Rule: TypeAlias = Callable[[SimpleNamespace, AbstractSet[str]], Iterator[Problem]]

FAMILY_KEYS = {
    "butterworth": (),
    "bessel": (),
    "chebyshev": ("ripple_db",),
    "inverse-chebyshev": ("stop_db",),
    "elliptic": ("ripple_db", "stop_db"),
}
OPTION_METHODS = {
    "match_hz": ("bilinear", "matched"),
    "first_sample": ("impulse-invariant",),
    "zeros_at_infinity": ("matched",),
}
SINGLE_KEYS = ("kind", "structure", "flush_below")
"""The keys of [arithmetic] that single precision uses."""
COUNT_LIMITS = ("worst_case_counts", "noise_counts", "dead_band_counts")


def _design(table: SimpleNamespace, given: AbstractSet[str]) -> Iterator[Problem]:
    rate = getattr(table.sampling, "rate_hz", None)
    band = getattr(table.budget, "band_hz", None)
    if rate is not None and band is not None and 2 * band >= rate:
        yield Problem(
            "budget.band_hz",
            plain(band),
            f"less than half the sampling rate, {plain(rate / 2)}",
            "a narrower band or a higher rate",
        )
    single = getattr(table.arithmetic, "kind", None) == "float32"
    clamp = getattr(table.arithmetic, "clamp", None)
    reach = getattr(getattr(table.signals, "output", None), "full_scale", None)
    if not single and clamp is not None and reach is not None and max(abs(end) for end in clamp) > reach:
        remedy = "limits that the output can reach, or a larger output full_scale"
        yield Problem("arithmetic.clamp", _pair(clamp), f"within the output's full_scale, {plain(reach)}", remedy)
    source = getattr(table.signals, "input", None)
    peak, full_scale = getattr(source, "peak", None), getattr(source, "full_scale", None)
    if not single and peak is not None and full_scale is not None and peak > full_scale:
        remedy = "raise full_scale, as larger values can't be represented"
        yield Problem("signals.input.peak", plain(peak), f"at most full_scale, {plain(full_scale)}", remedy)
    for key in COUNT_LIMITS if single else ():
        if getattr(table.budget, key, None) is not None:
            found = 'a limit in output counts, which the kind "float32" does not have'
            remedy = f"remove {key}: check shows noise and bounds in output units"
            yield Problem(f"budget.{key}", found, 'only with arithmetic.kind = "fixed"', remedy)


def _ode(table: SimpleNamespace, given: AbstractSet[str]) -> Iterator[Problem]:
    if table.output is not None and table.before is not None and len(table.before) > len(table.output) - 1:
        order = len(table.output) - 1
        yield Problem(
            "before",
            f"a list of {len(table.before)}",
            f"at most {order} numbers, as the equation has order {order}",
            "give y, y', ... up to the derivative below the highest",
        )


def _roots(table: SimpleNamespace, given: AbstractSet[str]) -> Iterator[Problem]:
    for key in ("poles", "zeros"):
        order = sum(2 if im > 0 else 1 for _, im in getattr(table, key) or ())
        if order > HIGHEST_ORDER:
            yield Problem(
                key,
                f"roots of order {order} (a conjugate pair counts as two)",
                f"at most {HIGHEST_ORDER}",
                "split the filter into two designs",
            )


def _matrices(table: SimpleNamespace, given: AbstractSet[str]) -> Iterator[Problem]:
    if table.a is None:
        return
    states = len(table.a)
    lists = [(f"a[{i}]", row) for i, row in enumerate(table.a)] + [("b", table.b), ("c", table.c)]
    for key, numbers in lists:
        if numbers is not None and len(numbers) != states:
            yield Problem(
                key,
                f"a list of {len(numbers)}",
                f"a list of {states} numbers, as a has {states} rows",
                "a is square, and b and c are as long as a",
            )


def _lag(table: SimpleNamespace, given: AbstractSet[str]) -> Iterator[Problem]:
    accepted = "exactly one of time_constant_s and corner_hz"
    if {"time_constant_s", "corner_hz"} <= given:
        yield Problem("corner_hz", "both time_constant_s and corner_hz", accepted, "remove one of them")
    if not {"time_constant_s", "corner_hz"} & given:
        yield Problem("corner_hz", "neither time_constant_s nor corner_hz", accepted, "add one of them")


def _family(table: SimpleNamespace, given: AbstractSet[str]) -> Iterator[Problem]:
    if table.family is None:
        return
    needed = FAMILY_KEYS[table.family]
    for key in ("ripple_db", "stop_db"):
        if key in needed and key not in given:
            yield Problem(key, "missing", f'a number, which the family "{table.family}" needs', f"add {key} = ...")
        if key in given and key not in needed:
            users = " or ".join(f'"{family}"' for family, keys in FAMILY_KEYS.items() if key in keys)
            yield Problem(
                key, f'a key that the family "{table.family}" does not use', f"only with {users}", f"remove {key}"
            )
    both = needed == ("ripple_db", "stop_db") and None not in (table.ripple_db, table.stop_db)
    if both and table.stop_db <= table.ripple_db:
        remedy = "let the stop band lie below the ripple of the pass band"
        yield Problem("stop_db", plain(table.stop_db), f"more than ripple_db, {plain(table.ripple_db)}", remedy)


def _band(table: SimpleNamespace, given: AbstractSet[str]) -> Iterator[Problem]:
    yield from _family(table, given)
    if None not in (table.low_hz, table.high_hz) and table.low_hz >= table.high_hz:
        yield Problem("high_hz", plain(table.high_hz), f"more than low_hz, {plain(table.low_hz)}", "widen the band")


def _pid(table: SimpleNamespace, given: AbstractSet[str]) -> Iterator[Problem]:
    gains = (table.kp, table.ki, table.kd)
    if None not in gains and not any(gains):
        yield Problem("kp", "kp, ki and kd all 0", "at least one of kp, ki and kd other than 0", "add kp = ...")
    if table.kd == 0 and "derivative_corner_hz" in given:
        yield Problem(
            "derivative_corner_hz",
            "a key that nothing uses while kd is 0",
            "only with kd",
            "add kd = ... or remove derivative_corner_hz",
        )


def _sampling(table: SimpleNamespace, given: AbstractSet[str]) -> Iterator[Problem]:
    for option, methods in OPTION_METHODS.items():
        if table.method is not None and option in given and table.method not in methods:
            yield Problem(
                option,
                f'an option that the method "{table.method}" does not use',
                "only with " + " or ".join(f'"{method}"' for method in methods),
                f"remove {option}",
            )
    rate, match = table.rate_hz, table.match_hz
    if rate is not None and match is not None and 2 * match >= rate:
        yield Problem(
            "match_hz",
            plain(match),
            f"less than half the sampling rate, {plain(rate / 2)}",
            f"match below {plain(rate / 2)} Hz, or sample faster than {plain(2 * match)} Hz",
        )


def _signals(table: SimpleNamespace, given: AbstractSet[str]) -> Iterator[Problem]:
    if getattr(table.output, "peak", None) is not None:
        yield Problem("output.peak", "a peak", "a peak of the input only", "remove peak: the output's is computed")


def _arithmetic(table: SimpleNamespace, given: AbstractSet[str]) -> Iterator[Problem]:
    if table.kind == "float32":
        yield from _single_precision(table, given)
        return
    if table.kind is not None and table.flush_below is not None:
        yield _of_the_other_kind("flush_below", table.kind, "float32")
    if table.clamp is not None:
        low, high = table.clamp
        if low >= high:
            yield Problem("clamp", _pair(table.clamp), "[low, high] with low less than high", "exchange the two")
        if table.structure not in ("parallel", "auto", None):
            yield Problem(
                "clamp",
                f'a key that the structure "{table.structure}" does not use',
                'only with "parallel", which keeps apart what integrates, or "auto"',
                'write structure = "parallel"',
            )
    if table.state_bits is not None:
        if table.data_bits is not None and table.state_bits < table.data_bits:
            yield Problem(
                "state_bits", str(table.state_bits), f"at least data_bits, {table.data_bits}", "widen the states"
            )
        elif table.structure == "direct":
            yield Problem(
                "state_bits",
                'a key that the structure "direct" does not use: its states are data words',
                'only with "transposed", "delta", "coupled", "parallel" or "auto"',
                "remove state_bits, or choose another structure",
            )


def _single_precision(table: SimpleNamespace, given: AbstractSet[str]) -> Iterator[Problem]:
    for key in (field.name for field in attrs.fields(Arithmetic)):
        if key in given and getattr(table, key) is not None and key not in SINGLE_KEYS:
            yield _of_the_other_kind(key, table.kind, "fixed")
    if "structure" in given and table.structure not in (None, "transposed"):
        yield Problem("structure", describe(table.structure), '"transposed" with kind = "float32"', "remove structure")


def _of_the_other_kind(key: str, kind: str, user: str) -> Problem:
    return Problem(key, f'a key that the kind "{kind}" does not use', f'only with kind = "{user}"', f"remove {key}")


def _pair(ends: tuple[fmpq, fmpq]) -> str:
    return f"[{plain(ends[0])}, {plain(ends[1])}]"


def _budget(table: SimpleNamespace, given: AbstractSet[str]) -> Iterator[Problem]:
    users = [key for key in ("magnitude_db", "phase_deg") if key in given]
    if users and "band_hz" not in given:
        yield Problem(
            "band_hz", "missing", f"the frequency up to which {' and '.join(users)} must hold", "add band_hz = ..."
        )


RULES: dict[type[Any], Rule] = {
    Design: _design,
    OdeForm: _ode,
    RootsForm: _roots,
    MatricesForm: _matrices,
    Lag: _lag,
    Lowpass: _family,
    Highpass: _family,
    Bandpass: _band,
    Bandstop: _band,
    Pid: _pid,
    Sampling: _sampling,
    Signals: _signals,
    Arithmetic: _arithmetic,
    Budget: _budget,
}
