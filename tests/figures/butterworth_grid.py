"""Accuracy of the sections of Butterworth low-passes, order 2 to 8, at 10 to 100,000 samples per corner period.

    python tests/figures/butterworth_grid.py

Each row is one order, rate and method.  "certified" is the largest radius of a coefficient relative to the largest of
its group, and of 1 + a1 + a2 relative to itself.  "true" is the largest difference between the pulse response of the
sections, their midpoints taken as exact numbers, and an independent computation in mpmath, relative to the peak;
"first" is the same for the first samples, each relative to itself.  The last columns are what doubles make of it:
scipy.signal.butter and cont2discrete on polynomials.
"""

import sys
import time
import warnings
from collections.abc import Callable, Sequence

import mpmath
from attrs import frozen
from flint import acb, arb, fmpq

from afterkick.design import schema
from afterkick.model.blocks import block_factors
from afterkick.model.model import build
from afterkick.numbers import working_bits
from afterkick.sampling import Section, sample

ORDERS = (2, 4, 6, 8)
SAMPLES_PER_PERIOD = (10, 100, 1_000, 10_000, 100_000)
METHODS = ("zero-order-hold", "first-order-hold", "impulse-invariant", "bilinear", "matched", "backward-difference")
LIBRARY_NAMES = {
    "zero-order-hold": "zoh",
    "first-order-hold": "foh",
    "impulse-invariant": "impulse",
    "bilinear": "bilinear",
    "backward-difference": "backward_diff",
}
SECTION_BITS = 112
DIGITS = 160
"""The modes of order 8 at 100,000 samples a period cancel to 40 digits; 60 must be left."""
LIMIT = mpmath.mpf("1e-20")


@frozen
class Row:
    order: int
    samples_per_period: int
    method: str
    certified: float
    true: float
    first: float
    library: str


def indices(order: int, samples_per_period: int) -> tuple[list[int], list[int]]:
    """The first samples, and samples spread over two and a half periods of the corner frequency."""
    spread = {round(samples_per_period * k / 16) for k in range(1, 41)}
    return list(range(order + 3)), sorted(spread - set(range(order + 3)))


# The independent road, in mpmath: poles on the circle, residues, analytic responses or mapped poles.


def expected_pulse(order: int, samples_per_period: int, method: str) -> Callable[[int], mpmath.mpf]:
    """g[n] of the sampled filter with its corner at 1 Hz."""
    w = 2 * mpmath.pi
    period = mpmath.mpf(1) / samples_per_period
    poles = [w * mpmath.expjpi(mpmath.mpf(2 * k + order + 1) / (2 * order)) for k in range(order)]
    if method in ("bilinear", "matched", "backward-difference"):
        return _mapped(order, poles, period, method)
    residues = [w**order / mpmath.fprod(p - q for q in poles if q is not p) for p in poles]

    def kick(t: mpmath.mpf) -> mpmath.mpf:
        return sum(r * mpmath.exp(p * t) for r, p in zip(residues, poles, strict=True)).real

    def step(t: mpmath.mpf) -> mpmath.mpf:
        return sum(r / p * mpmath.expm1(p * t) for r, p in zip(residues, poles, strict=True)).real if t > 0 else t * 0

    def ramp(t: mpmath.mpf) -> mpmath.mpf:
        terms = (r / p**2 * (mpmath.expm1(p * t) - p * t) for r, p in zip(residues, poles, strict=True))
        return sum(terms).real if t > 0 else t * 0

    return {
        "zero-order-hold": lambda n: step(n * period) - step((n - 1) * period),
        "first-order-hold": lambda n: (ramp((n + 1) * period) - 2 * ramp(n * period) + ramp((n - 1) * period)) / period,
        "impulse-invariant": lambda n: period * kick(n * period) if n else period * 0,
    }[method]


def _mapped(order: int, poles: Sequence[mpmath.mpc], period: mpmath.mpf, method: str) -> Callable[[int], mpmath.mpf]:
    w = 2 * mpmath.pi
    if method == "bilinear":
        k = 2 / period
        images = [(k + p) / (k - p) for p in poles]
        gain, zero = mpmath.fprod(w / (k - p) for p in poles).real, -1
    elif method == "matched":
        images = [mpmath.exp(p * period) for p in poles]
        gain, zero = mpmath.fprod((1 - z) / 2 for z in images).real, -1
    else:
        images = [1 / (1 - p * period) for p in poles]
        gain, zero = mpmath.fprod(w * period / (1 - p * period) for p in poles).real, 0
    residues = [gain * (z - zero) ** order / mpmath.fprod(z - y for y in images if y is not z) for z in images]

    def pulse(n: int) -> mpmath.mpf:
        return gain if n == 0 else sum(r * z ** (n - 1) for r, z in zip(residues, images, strict=True)).real

    return pulse


# The sections, their midpoints taken as exact.


def sections_of(order: int, samples_per_period: int, method: str) -> tuple[Section, ...]:
    low_pass = schema.Lowpass(family="butterworth", order=order, corner_hz=fmpq(1))
    model = build(block_factors(low_pass))
    return sample(model, schema.Sampling(fmpq(samples_per_period), method)).sections(SECTION_BITS)


def certified_radius(sections: Sequence[Section]) -> float:
    """The largest relative radius among the coefficients and the sums 1 + a1 + a2."""
    worst = 0.0
    for section in sections:
        for group in (section.b, section.a):
            largest = max(float(abs(value).mid()) for value in group)
            worst = max(worst, *(float(value.rad()) / largest for value in group))
        with working_bits(4 * SECTION_BITS):
            at_one = section.a_at_one
        worst = max(worst, float(at_one.rad()) / float(abs(at_one).mid()))
    return worst


def exact_midpoints(sections: Sequence[Section]) -> list[tuple[list[arb], list[arb]]]:
    return [([x.mid() for x in section.b], [x.mid() for x in section.a]) for section in sections]


def pulse_of(midpoints: Sequence[tuple[list[arb], list[arb]]]) -> Callable[[int], arb]:
    """g[n], n >= 1, of sections of order 2 with distinct poles, by partial fractions from the sections' own roots."""
    poles = []
    for _, (_, a1, a2) in midpoints:
        root = acb(a1 * a1 - 4 * a2).sqrt()
        poles += [(root - a1) / 2, (-root - a1) / 2]
    residues = []
    for index, z in enumerate(poles):
        value = acb(1)
        for b, _ in midpoints:
            value *= (b[0] * z + b[1]) * z + b[2]
        for other, y in enumerate(poles):
            if other != index:
                value /= z - y
        residues.append(value)

    def pulse(n: int) -> arb:
        return sum((r * z ** (n - 1) for r, z in zip(residues, poles, strict=True)), acb(0)).real

    return pulse


def first_of(midpoints: Sequence[tuple[list[arb], list[arb]]], number: int) -> list[arb]:
    """g[0] .. by recursion."""
    signal = [arb(1)] + [arb(0)] * (number - 1)
    for b, a in midpoints:
        answer: list[arb] = []
        for n, value in enumerate(signal):
            total = b[0] * value
            for k in (1, 2):
                if n >= k:
                    total += b[k] * signal[n - k] - a[k] * answer[n - k]
            answer.append(total)
        signal = answer
    return signal


def as_mpf(value: arb) -> mpmath.mpf:
    """The midpoint, exactly."""
    mantissa, exponent = value.mid().man_exp()
    return mpmath.ldexp(mpmath.mpf(int(mantissa)), int(exponent))


def judged(order: int, samples_per_period: int, method: str, library: bool = True) -> Row:
    """One row of the table."""
    sections = sections_of(order, samples_per_period, method)
    first, spread = indices(order, samples_per_period)
    with mpmath.workdps(DIGITS), working_bits(700):
        midpoints = exact_midpoints(sections)
        pulse = pulse_of(midpoints)
        wanted = expected_pulse(order, samples_per_period, method)
        expected = {n: wanted(n) for n in first + spread}
        found = dict(enumerate(map(as_mpf, first_of(midpoints, len(first)))))
        assert all(abs(as_mpf(pulse(n)) - found[n]) <= mpmath.mpf("1e-60") for n in first[1:])
        found |= {n: as_mpf(pulse(n)) for n in spread}
        peak = max(abs(value) for value in expected.values())
        true = max(abs(found[n] - expected[n]) for n in expected) / peak
        relative = max(abs(found[n] - expected[n]) / abs(expected[n]) if expected[n] else abs(found[n]) for n in first)
        doubles = in_doubles(order, samples_per_period, method, expected, float(peak)) if library else ""
    return Row(order, samples_per_period, method, certified_radius(sections), float(true), float(relative), doubles)


def in_doubles(order: int, samples_per_period: int, method: str, expected: dict[int, mpmath.mpf], peak: float) -> str:
    """The error of scipy.signal's polynomials relative to the peak, or that they are unstable."""
    import numpy as np
    import scipy.signal

    if method not in LIBRARY_NAMES:
        return "no such method"
    period = 1 / samples_per_period
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        system = scipy.signal.butter(order, 2 * np.pi, analog=True)
        b, a, _ = scipy.signal.cont2discrete(system, period, method=LIBRARY_NAMES[method])
    b = np.ravel(b)
    radius = np.abs(np.roots(a)).max()
    if not radius < 1:
        return f"unstable, |z| = {radius:.6f}"
    kick = np.zeros(max(expected) + 1)
    kick[0] = 1
    response = scipy.signal.lfilter(b, a, kick)
    return f"{max(abs(response[n] - float(value)) for n, value in expected.items()) / peak:.1e}"


def main() -> int:
    began = time.perf_counter()
    print(f"{'order':>5} {'samples':>8}  {'method':<20} {'certified':>9} {'true':>9} {'first':>9}  scipy.signal")
    rows = []
    for order in ORDERS:
        for samples_per_period in SAMPLES_PER_PERIOD:
            for method in METHODS:
                row = judged(order, samples_per_period, method)
                rows.append(row)
                print(
                    f"{row.order:>5} {row.samples_per_period:>8}  {row.method:<20} {row.certified:>9.1e} "
                    f"{row.true:>9.1e} {row.first:>9.1e}  {row.library}",
                    flush=True,
                )
    worst = [max(getattr(row, name) for row in rows) for name in ("certified", "true", "first")]
    print(f"worst of {len(rows)} rows: certified {worst[0]:.1e}, true {worst[1]:.1e}, first {worst[2]:.1e}")
    print(f"limit 1e-20; {time.perf_counter() - began:.1f} s")
    return 0 if max(worst) <= LIMIT else 1


if __name__ == "__main__":
    sys.exit(main())
