"""The published filters in integers: bit for bit what ships, inside the limits of the standards.

Sources, each beside its test: ANSI/AAMI EC11 and IEC 60601-2-25 (low-frequency impulse requirement of diagnostic ECG),
SAE J211-1 Appendix C, ITU-R BS.1770 Annex 1, IEC 61672-1.  The figures are those of the tests of the exact filters.
"""

from math import log10, pi

import numpy as np
import pytest
from numpy.typing import NDArray

from afterkick.design import read_design
from afterkick.fixed.simulate import simulate
from afterkick.verdict import Assessment, assess

Floats = NDArray[np.float64]


def design(
    blocks: str, rate_hz: float, sampling: str, arithmetic: str, input_: float = 1, output: float = 1
) -> Assessment:
    return assess(
        read_design(
            f"""
            [design]
            name = "probe"
            [model]
            kind = "blocks"
            {blocks}
            [sampling]
            rate_hz = {rate_hz}
            {sampling}
            [signals]
            input = {{ full_scale = {input_} }}
            output = {{ full_scale = {output} }}
            [arithmetic]
            {arithmetic}
            """
        )
    )


def run(found: Assessment, signal: Floats) -> Floats:
    """The integer filter on a signal in input units, in output units."""
    program = found.realisation.program
    scale = 1 << (program.data_bits - 1)
    sizes = [float(int(f.full_scale.p)) / int(f.full_scale.q) for f in (program.input_format, program.output_format)]
    codes = np.clip(np.round(signal / sizes[0] * scale), -scale, scale - 1).astype(np.int64)
    return simulate(program, codes) * sizes[1] / scale


def level_db(found: Assessment, frequency_hz: float, amplitude: float, seconds: float) -> float:
    """The level of a sine after it has settled, by correlation over whole periods in the second half."""
    rate = float(int(found.sampled.rate_hz.p)) / int(found.sampled.rate_hz.q)
    samples = round(seconds * rate)
    n = np.arange(2 * samples)
    turn = 2 * pi * frequency_hz / rate
    output = run(found, amplitude * np.sin(turn * n))[samples:]
    window = np.hanning(samples)
    phasor = np.sum(window * output * np.exp(-1j * turn * n[samples:])) / np.sum(window)
    return 20 * log10(2 * abs(phasor) / amplitude)


def highpass(order: int, corner_hz: float, rate_hz: int, arithmetic: str) -> Assessment:
    block = f'[[model.block]]\ntype = "highpass"\nfamily = "butterworth"\norder = {order}\ncorner_hz = {corner_hz}'
    return design(block, rate_hz, 'method = "bilinear"', arithmetic, 4, 10)


def after_the_pulse(found: Assessment, rate_hz: int) -> tuple[float, float]:
    """Largest displacement (mV) and slope (mV/s, over 50 ms) after 3 mV for 100 ms."""
    pulse = round(0.1 * rate_hz)
    signal = np.zeros(pulse + 8 * rate_hz)
    signal[:pulse] = 3.0
    output = run(found, signal)[pulse:]
    span = rate_hz // 20
    return float(np.max(np.abs(output))), float(np.max(np.abs(output[span:] - output[:-span]))) / 0.05


@pytest.mark.parametrize("rate_hz", [500, 1000])
@pytest.mark.parametrize(("data_bits", "carry"), [(16, 1), (32, "false")])
def test_ecg_pulse_limits_hold_bit_true(rate_hz: int, data_bits: int, carry: int | str) -> None:
    """EC11 3.2.7, IEC 60601-2-25: at most 0.1 mV and 0.30 mV/s after 0.3 mV s; 0.0928 mV for 0.05 Hz (recomputed)."""
    found = highpass(1, 0.05, rate_hz, f"data_bits = {data_bits}\ncoefficient_bits = 32\ncarry = {carry}")
    displacement, slope = after_the_pulse(found, rate_hz)
    assert displacement == pytest.approx(0.09278, abs=0.0006)
    assert displacement <= 0.1
    assert slope <= 0.30


@pytest.mark.parametrize("rate_hz", [500, 1000])
def test_ecg_failing_cases_fail_as_published(rate_hz: int) -> None:
    """The same sources: second order undershoots to 0.132 mV; 0.67 Hz gives 4.34 mV/s (figures recomputed)."""
    second = highpass(2, 0.05, rate_hz, "data_bits = 32\ncoefficient_bits = 32\ncarry = 2")
    assert after_the_pulse(second, rate_hz)[0] == pytest.approx(0.1318, abs=0.001)
    monitor = highpass(1, 0.67, rate_hz, "coefficient_bits = 32\ncarry = 1")
    assert after_the_pulse(monitor, rate_hz)[1] == pytest.approx(4.34, rel=0.12)  # over 50 ms, not at the first instant


def test_ecg_filter_without_error_feedback_never_comes_back() -> None:
    """Common practice: a 16-bit recursion so slow has a dead band of half a count over 1 - pole, here some 0.19 mV."""
    found = highpass(1, 0.05, 500, "coefficient_bits = 32")
    signal = np.zeros(500 * 60)
    signal[:500] = 3.0
    assert abs(run(found, signal)[-1]) > 0.1
    assert found.realisation.bounds.dead_band is not None
    assert found.realisation.bounds.dead_band * 10 / 32768 >= abs(run(found, signal)[-1])


J211_CFC60 = {30.0: -0.029, 60.0: -0.454, 100.0: -3.008, 120.0: -5.385, 180.0: -14.58}


@pytest.mark.parametrize("bits", [16, 32])
def test_j211_class_60_levels_bit_true(bits: int) -> None:
    """SAE J211-1 Appendix C at 10 kHz: two passes are twice the level of one (levels recomputed)."""
    corner = 60 * 2.0775
    block = f'[[model.block]]\ntype = "lowpass"\nfamily = "butterworth"\norder = 2\ncorner_hz = {corner}'
    sampling = f'method = "bilinear"\nmatch_hz = {corner}'
    found = design(block, 10000, sampling, f"data_bits = {bits}\ncoefficient_bits = {bits}\ncarry = 2", 1, 1.25)
    for frequency, expected in J211_CFC60.items():
        assert 2 * level_db(found, frequency, 0.9, 0.4) == pytest.approx(expected, abs=0.02 if bits == 32 else 0.1)
    assert found.realisation.dc_gain == 1


@pytest.mark.parametrize(("bits", "margin"), [(16, 0.02), (32, 0.001)])
def test_bs1770_gain_at_997_hz_bit_true(bits: int, margin: float) -> None:
    """ITU-R BS.1770 Annex 1: the cascade has 0.691 dB at 997 Hz, the offset of its loudness formula."""
    w = 2 * pi * 1681.974450955533
    shelf = (
        '[[model.block]]\ntype = "ratio"\n'
        f"numerator = [1.584864701130855, {1.258720930232562 * w / 0.7071752369554196!r}, {w * w!r}]\n"
        f"denominator = [1, {w / 0.7071752369554196!r}, {w * w!r}]\n"
    )
    first = design(shelf, 48000, 'method = "bilinear"\nmatch_hz = 1681.974450955533', _words(bits), 1, 2.5)
    high = f'[[model.block]]\ntype = "ratio"\nnumerator = [1, 0, 0]\ndenominator = [1, {_rlb(1)!r}, {_rlb(2)!r}]\n'
    second = design(high, 48000, 'method = "bilinear"\nmatch_hz = 38.13547087602444', _words(bits), 1, 2.5)
    # the standard rescales the second numerator to 1, -2, 1
    level = sum(level_db(one, 997, 0.7, 0.25) for one in (first, second)) - 20 * log10(0.9950299263000474)
    assert level == pytest.approx(0.691, abs=margin)


def _words(bits: int) -> str:
    return f"data_bits = {bits}\ncoefficient_bits = {max(bits, 24)}\ncarry = 2"


def _rlb(power: int) -> float:
    w = 2 * pi * 38.13547087602444
    return w / 0.5003270373238773 if power == 1 else w * w


A_CLASS_1 = {  # exact frequency exponent n of 1000 * 10^(n/10): table level, upper and lower limit (2002 edition)
    -15: (-39.4, 2.0, -2.0),
    -10: (-19.1, 1.5, -1.5),
    -5: (-6.6, 1.4, -1.4),
    0: (0.0, 1.1, -1.1),
    5: (1.2, 1.6, -1.6),
    9: (-1.1, 2.1, -3.1),
    10: (-2.5, 2.6, -3.6),
}


@pytest.mark.parametrize("bits", [16, 32])
def test_a_weighting_is_class_1_bit_true(bits: int) -> None:
    """IEC 61672-1:2002 Table 2, by the bilinear transform at 48 kHz; poles from the relations of its Annex."""
    f1, f2, f3, f4 = 20.598997057618316, 107.65264864304629, 737.8622307362901, 12194.217147998012
    lags = "".join(f'[[model.block]]\ntype = "lag"\ncorner_hz = {f!r}\n' for f in (f4, f4))
    highs = "".join(
        f'[[model.block]]\ntype = "highpass"\nfamily = "butterworth"\norder = 1\ncorner_hz = {f!r}\n'
        for f in (f1, f1, f2, f3)
    )
    gain = f'[[model.block]]\ntype = "gain"\ngain = {10 ** (1.999655535667262 / 20)!r}\n'
    found = design(highs + lags + gain, 48000, 'method = "bilinear"', _words(bits), 1, 2)
    for n, (level, upper, lower) in A_CLASS_1.items():
        off = level_db(found, 1000 * 10 ** (n / 10), 0.9, 0.3) - level
        assert lower <= off <= upper, f"{1000 * 10 ** (n / 10):.0f} Hz: {off:.2f} dB off"
