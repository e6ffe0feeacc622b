"""scipy.signal and control, where they are well conditioned: orders 1 to 4 at moderate rates."""

from typing import Any

import control
import numpy as np
import pytest
import scipy.signal

from helpers import exact, ratio, sampled, section_floats

# numerator, denominator, samples per second
CASES: dict[str, tuple[list[str], list[str], str]] = {
    "lag": (["3"], ["1", "2"], "10"),
    "lead-lag": (["2", "5"], ["1", "0.7"], "8"),
    "pair": (["4"], ["1", "0.8", "4"], "12"),
    "pair with a zero": (["-1", "3"], ["1", "0.8", "4"], "12"),
    "pair with feedthrough": (["2", "0.1", "7"], ["1", "0.8", "4"], "9"),
    "double pole": (["1", "1"], ["1", "6", "9"], "15"),
    "integrator": (["2"], ["1", "0"], "5"),
    "double integrator": (["1", "0.5"], ["1", "0", "0"], "5"),
    "undamped": (["1"], ["1", "0", "9"], "7"),
    "third": (["1", "2"], ["1", "3.5", "8.5", "5"], "10"),
    "fourth": (["5", "1", "2"], ["1", "2.4", "9", "8", "7"], "11"),
    "fourth with an integrator": (["3"], ["1", "2", "5", "4", "0"], "6"),
}
METHODS = {
    "zero-order-hold": "zoh",
    "first-order-hold": "foh",
    "bilinear": "bilinear",
    "backward-difference": "backward_diff",
    "impulse-invariant": "impulse",
}


def samples_of(b: np.ndarray, a: np.ndarray, number: int = 40) -> np.ndarray:
    return scipy.signal.lfilter(b, a, np.eye(1, number)[0])


def found_samples(numerator: list[str], denominator: list[str], rate: str, method: str, **options: Any) -> np.ndarray:
    signal = np.eye(1, 40)[0]
    for section in sampled(ratio(numerator, denominator), exact(rate), method, **options).sections(80):
        signal = scipy.signal.lfilter(*section_floats(section), signal)
    return signal


def agree(found: np.ndarray, expected: np.ndarray) -> None:
    assert found == pytest.approx(expected, rel=0, abs=2e-11 * np.abs(expected).max())


# The library's impulse rule has no feedthrough.
PAIRS = [
    (name, method)
    for name, (top, bottom, _) in CASES.items()
    for method in METHODS
    if method != "impulse-invariant" or len(top) < len(bottom)
]


@pytest.mark.parametrize(("name", "method"), PAIRS)
def test_scipy_cont2discrete(name: str, method: str) -> None:
    """scipy.signal.cont2discrete; its impulse method keeps the whole h(0+)."""
    numerator, denominator, rate = CASES[name]
    system = ([float(x) for x in numerator], [float(x) for x in denominator])
    b, a, _ = scipy.signal.cont2discrete(system, 1 / float(rate), method=METHODS[method])
    options = {"first_sample": "full"} if method == "impulse-invariant" else {}
    agree(found_samples(numerator, denominator, rate, method, **options), samples_of(np.ravel(b), a))


@pytest.mark.parametrize("name", CASES)
@pytest.mark.parametrize("method", ["zero-order-hold", "bilinear"])
def test_control_sample_system(name: str, method: str) -> None:
    """control.sample_system, bilinear also matched at a frequency in rad/s."""
    numerator, denominator, rate = CASES[name]
    system = control.tf([float(x) for x in numerator], [float(x) for x in denominator])
    variants: list[tuple[dict[str, Any], dict[str, Any]]] = [({}, {})]
    if method == "bilinear":
        variants.append(({"prewarp_frequency": 2 * np.pi * 0.75}, {"match_hz": "0.75"}))
    for theirs, ours in variants:
        discrete = control.sample_system(system, 1 / float(rate), METHODS[method], **theirs)
        b, a = discrete.num[0][0], discrete.den[0][0]
        aligned = np.concatenate([np.zeros(len(a) - len(b)), b])
        agree(found_samples(numerator, denominator, rate, method, **ours), samples_of(aligned, a))


@pytest.mark.parametrize("name", ["lag", "pair", "pair with a zero", "double pole", "third", "fourth"])
def test_control_matched(name: str) -> None:
    """control's matched rule leaves zeros at infinity there, and keeps the gain at 0 Hz."""
    numerator, denominator, rate = CASES[name]
    system = control.tf([float(x) for x in numerator], [float(x) for x in denominator])
    discrete = control.sample_system(system, 1 / float(rate), "matched")
    zeros, poles, gain = np.exp(system.zeros() / float(rate)), np.exp(system.poles() / float(rate)), discrete.dcgain()
    b, a = (np.atleast_1d(np.real(np.poly(roots))) for roots in (zeros, poles))
    assert gain == pytest.approx(system.dcgain(), rel=1e-9)
    b = np.concatenate([np.zeros(len(a) - len(b)), b * gain * a.sum() / b.sum()])
    agree(found_samples(numerator, denominator, rate, "matched", zeros_at_infinity="delay"), samples_of(b, a))
    assert sorted(np.abs(discrete.poles())) == pytest.approx(sorted(np.abs(poles)), rel=1e-6)
