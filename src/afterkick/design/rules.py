"""Rules between the keys of a table, and between tables.

A rule sees what could be read: each field of the table, None where it is absent or wrong itself, so that a problem
elsewhere hides none here.  ``given`` are the keys that the file writes.  It yields the key to name, and what is wrong.
"""

from collections.abc import Callable, Iterator
from collections.abc import Set as AbstractSet
from types import SimpleNamespace
from typing import Any, TypeAlias

from afterkick.design.limits import HIGHEST_ORDER, Wrong, describe, plain
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
    Signal,
    Signals,
)

__all__ = ["RULES", "Rule"]

Flaws: TypeAlias = Iterator[tuple[str, Wrong]]
Rule: TypeAlias = Callable[[SimpleNamespace, AbstractSet[str]], Flaws]

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


def _design(table: SimpleNamespace, given: AbstractSet[str]) -> Flaws:
    rate = getattr(table.sampling, "rate_hz", None)
    band = getattr(table.budget, "band_hz", None)
    if rate is not None and band is not None and 2 * band >= rate:
        yield (
            "budget.band_hz",
            Wrong(
                plain(band),
                f"less than half the sampling rate, {plain(rate / 2)}",
                "a narrower band or a higher rate",
            ),
        )


def _ode(table: SimpleNamespace, given: AbstractSet[str]) -> Flaws:
    if table.output is not None and table.before is not None and len(table.before) > len(table.output) - 1:
        order = len(table.output) - 1
        yield (
            "before",
            Wrong(
                f"a list of {len(table.before)}",
                f"at most {order} numbers, as the equation has order {order}",
                "give y, y', ... up to the derivative below the highest",
            ),
        )


def _roots(table: SimpleNamespace, given: AbstractSet[str]) -> Flaws:
    for key in ("poles", "zeros"):
        order = sum(2 if im > 0 else 1 for _, im in getattr(table, key) or ())
        if order > HIGHEST_ORDER:
            yield (
                key,
                Wrong(
                    f"roots of order {order} (a conjugate pair counts as two)",
                    f"at most {HIGHEST_ORDER}",
                    "split the filter into two designs",
                ),
            )


def _matrices(table: SimpleNamespace, given: AbstractSet[str]) -> Flaws:
    if table.a is None:
        return
    states = len(table.a)
    lists = [(f"a[{i}]", row) for i, row in enumerate(table.a)] + [("b", table.b), ("c", table.c)]
    for key, numbers in lists:
        if numbers is not None and len(numbers) != states:
            yield (
                key,
                Wrong(
                    f"a list of {len(numbers)}",
                    f"a list of {states} numbers, as a has {states} rows",
                    "a is square, and b and c are as long as a",
                ),
            )


def _lag(table: SimpleNamespace, given: AbstractSet[str]) -> Flaws:
    accepted = "exactly one of time_constant_s and corner_hz"
    if {"time_constant_s", "corner_hz"} <= given:
        yield "corner_hz", Wrong("both time_constant_s and corner_hz", accepted, "remove one of them")
    if not {"time_constant_s", "corner_hz"} & given:
        yield "corner_hz", Wrong("neither time_constant_s nor corner_hz", accepted, "add one of them")


def _family(table: SimpleNamespace, given: AbstractSet[str]) -> Flaws:
    if table.family is None:
        return
    needed = FAMILY_KEYS[table.family]
    for key in ("ripple_db", "stop_db"):
        if key in needed and key not in given:
            yield (
                key,
                Wrong("missing", f'a number, which the family "{table.family}" needs', f"add {key} = ..."),
            )
        if key in given and key not in needed:
            users = " or ".join(f'"{family}"' for family, keys in FAMILY_KEYS.items() if key in keys)
            yield (
                key,
                Wrong(f'a key that the family "{table.family}" does not use', f"only with {users}", f"remove {key}"),
            )
    both = needed == ("ripple_db", "stop_db") and None not in (table.ripple_db, table.stop_db)
    if both and table.stop_db <= table.ripple_db:
        remedy = "let the stop band lie below the ripple of the pass band"
        yield "stop_db", Wrong(plain(table.stop_db), f"more than ripple_db, {plain(table.ripple_db)}", remedy)


def _band(table: SimpleNamespace, given: AbstractSet[str]) -> Flaws:
    yield from _family(table, given)
    if None not in (table.low_hz, table.high_hz) and table.low_hz >= table.high_hz:
        yield (
            "high_hz",
            Wrong(plain(table.high_hz), f"more than low_hz, {plain(table.low_hz)}", "exchange the two"),
        )


def _pid(table: SimpleNamespace, given: AbstractSet[str]) -> Flaws:
    gains = (table.kp, table.ki, table.kd)
    if None not in gains and not any(gains):
        yield "kp", Wrong("kp, ki and kd all 0", "at least one of kp, ki and kd other than 0", "add kp = ...")
    if table.kd == 0 and "derivative_corner_hz" in given:
        yield (
            "derivative_corner_hz",
            Wrong(
                "a key that nothing uses while kd is 0", "only with kd", "add kd = ... or remove derivative_corner_hz"
            ),
        )


def _sampling(table: SimpleNamespace, given: AbstractSet[str]) -> Flaws:
    for option, methods in OPTION_METHODS.items():
        if table.method is not None and option in given and table.method not in methods:
            yield (
                option,
                Wrong(
                    f'an option that the method "{table.method}" does not use',
                    "only with " + " or ".join(f'"{method}"' for method in methods),
                    f"remove {option}",
                ),
            )
    rate, match = table.rate_hz, table.match_hz
    if rate is not None and match is not None and 2 * match >= rate:
        yield (
            "match_hz",
            Wrong(
                plain(match),
                f"less than half the sampling rate, {plain(rate / 2)}",
                f"match below {plain(rate / 2)} Hz, or sample faster than {plain(2 * match)} Hz",
            ),
        )


def _signal(table: SimpleNamespace, given: AbstractSet[str]) -> Flaws:
    if None not in (table.peak, table.full_scale) and table.peak > table.full_scale:
        yield (
            "peak",
            Wrong(
                plain(table.peak),
                f"at most full_scale, {plain(table.full_scale)}",
                "raise full_scale, as larger values can't be represented",
            ),
        )


def _signals(table: SimpleNamespace, given: AbstractSet[str]) -> Flaws:
    if getattr(table.output, "peak", None) is not None:
        yield "output.peak", Wrong("a peak", "a peak of the input only", "remove peak: the output's is computed")


def _arithmetic(table: SimpleNamespace, given: AbstractSet[str]) -> Flaws:
    if table.kind == "float32":
        yield "kind", _later(table.kind, 'kind = "fixed"')
    if table.structure not in (None, "direct"):
        yield "structure", _later(table.structure, 'structure = "direct"')
    if table.carry:
        yield "carry", _later(table.carry, "carry = false")
    if table.clamp is not None:
        low, high = table.clamp
        if low < high:
            yield "clamp", _later([low, high], "remove clamp")
        else:
            yield "clamp", Wrong(f"[{plain(low)}, {plain(high)}]", "[low, high] with low less than high")
    if table.state_bits is not None:
        if table.data_bits is not None and table.state_bits < table.data_bits:
            yield (
                "state_bits",
                Wrong(str(table.state_bits), f"at least data_bits, {table.data_bits}", "widen the states"),
            )
        else:
            yield "state_bits", _later(table.state_bits, "remove state_bits")


def _later(value: object, remedy: str) -> Wrong:
    return Wrong(f"{describe(value)}, not supported yet", f"in this version only {remedy}", remedy)


def _budget(table: SimpleNamespace, given: AbstractSet[str]) -> Flaws:
    users = [key for key in ("magnitude_db", "phase_deg") if key in given]
    if users and "band_hz" not in given:
        yield (
            "band_hz",
            Wrong("missing", f"the frequency up to which {' and '.join(users)} must hold", "add band_hz = ..."),
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
    Signal: _signal,
    Signals: _signals,
    Arithmetic: _arithmetic,
    Budget: _budget,
}
