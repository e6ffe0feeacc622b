"""The coefficient search: it helps, never harms, fits its words, and finds the same integers everywhere."""

import os
import statistics
import subprocess
import sys
from fractions import Fraction

import numpy as np
import pytest
from flint import fmpq

from afterkick.design.schema import Arithmetic, Lowpass, Notch, Signals
from afterkick.fixed import Program, direct_program, search
from afterkick.fixed.choice import choice_report
from afterkick.fixed.pulse_grid import Grid, Integers, exact_pulse, pulses, total, transient_samples
from afterkick.fixed.ranges import analyse
from afterkick.numbers import working_bits
from afterkick.sampling import Sampled
from figures import coefficient_search as figure
from fixed.random_designs import PlainSampled, random_program
from helpers import blocks, pulse, sampled


def integers(program: Program) -> list[tuple[object, ...]]:
    return [(s.b, s.b_fraction_bits, s.a, s.a_fraction_bits) for s in program.sections]


def filtered(seed: int, scale: int = 1) -> Sampled:
    """A low-pass of the figure, its time unit divided by ``scale``."""
    block, rate_hz, method = figure.low_pass(seed)
    options = {name: getattr(block, name) for name in ("ripple_db", "stop_db") if getattr(block, name) is not None}
    again = Lowpass(family=block.family, order=block.order, corner_hz=block.corner_hz * scale, **options)
    return sampled(blocks(again), rate_hz * scale, method)


def searched(one: Sampled, bits: int = 16) -> Program:
    return direct_program(one, Arithmetic(coefficient_bits=bits), Signals(), "probe")


def test_a_part_of_the_figure() -> None:
    """The first designs of figures/coefficient_search.py."""
    rows = list(figure.rows(12))
    assert statistics.median(row.factor for row in rows) >= figure.LEAST_FACTOR
    assert not any(row.exact is False for row in rows)


@pytest.mark.parametrize("seed", [0, 2, 7, 10, 15, 19, 22, 36, 43, 48])
def test_never_worse_than_the_nearest_integers_under_the_constraints(seed: int, monkeypatch) -> None:
    """Over all samples, in balls; without rounds the search returns its start."""
    one = filtered(seed)
    best = searched(one)
    monkeypatch.setattr(search, "ROUNDS", 0)
    start = searched(one)
    with working_bits(figure.BITS):
        exact = figure.pulse_until_faded(one)
        errors = [figure.error(program, one, exact) for program in (start, best)]
    assert errors[1] <= errors[0]
    assert errors[1] < errors[0] or integers(best) == integers(start)


@pytest.mark.parametrize("seed", [3, 5, 9, 24])
def test_integers_depend_on_nothing_but_the_design(seed: int) -> None:
    """Not on the working precision it starts with, and not on the unit of time."""
    expected = integers(searched(filtered(seed)))
    with working_bits(1024):
        assert integers(searched(filtered(seed))) == expected
    for scale in (2**20, fmpq(1, 2**9)):
        assert integers(searched(filtered(seed, scale))) == expected


def test_integers_depend_on_no_vector_unit() -> None:
    """The same in a process that is denied the wide instructions of this machine."""
    script = (
        "from fixed.test_search import filtered, integers, searched;"
        "print([integers(searched(filtered(seed))) for seed in (3, 24)])"
    )
    expected = str([integers(searched(filtered(seed))) for seed in (3, 24)])
    wide = " ".join(np.show_config(mode="dicts")["SIMD Extensions"]["found"])
    environment = {**os.environ, "NPY_DISABLE_CPU_FEATURES": wide, "PYTHONPATH": os.pathsep.join(sys.path)}
    done = subprocess.run([sys.executable, "-c", script], env=environment, capture_output=True, text=True, check=True)
    assert done.stdout.strip() == expected


@pytest.mark.parametrize("seed", range(12))
def test_searched_designs_are_valid_and_fit_their_words(seed: int) -> None:
    """All shapes of sections, words, accumulators and scalings."""
    program = random_program(seed, search=True)
    limit = 2 ** (program.coefficient_bits - 1)
    assert analyse(program).faults == ()
    assert all(max(map(abs, section.b + section.a)) <= limit for section in program.sections)
    nearest = random_program(seed)
    for one, other in zip(program.sections, nearest.sections, strict=True):
        assert one.a_fraction_bits == other.a_fraction_bits
        assert 0 <= other.b_fraction_bits - one.b_fraction_bits <= 2


def test_report_against_the_recursion() -> None:
    """The errors of the report against the difference equation run on the integers, and on the exact coefficients."""
    one = sampled(blocks(Lowpass("bessel", 3, fmpq(1))), 40, "first-order-hold")
    best = searched(one)
    nearest = direct_program(one, Arithmetic(), Signals(), "probe", search=False)
    assert [s.b_fraction_bits for s in best.sections] == [s.b_fraction_bits for s in nearest.sections]
    report = choice_report(best, one)
    exact = pulse(one.sections(256), report.last_sample + 1)
    peak = max(abs(value) for value in exact)
    for program, stated in ((nearest, report.nearest_error), (best, report.chosen_error)):
        plain = PlainSampled(
            tuple(
                ([fmpq(x) / fmpq(2) ** s.b_fraction_bits for x in s.b], [fmpq(x, s.a[0]) for x in s.a[1:]])
                for s in program.sections
            )
        )
        found = pulse(plain.sections(256), report.last_sample + 1)
        distance = max(abs(a - b) for a, b in zip(found, exact, strict=True))
        assert stated == pytest.approx(float(distance / peak), rel=1e-12)
    assert report.factor == pytest.approx(report.nearest_error / report.chosen_error)


def test_pulses_against_the_recursion_in_fractions() -> None:
    b = ((3, -1, 2), (5, 1, 0))
    a = ((-19, 12), (-13, 0))
    grid = Grid.over(400, 16, 8)
    values = np.array([b], dtype=float) / 16, np.array([a], dtype=float) / 16
    found = pulses(*values, grid)[0]
    signal = [Fraction(1)] + [Fraction(0)] * grid.indices[-1]
    for (b0, b1, b2), (a1, a2) in zip(b, a, strict=True):
        answer: list[Fraction] = []
        for n, x in enumerate(signal):
            past = [signal[n - i] if n >= i else Fraction(0) for i in (1, 2)]
            out = [answer[n - i] if n >= i else Fraction(0) for i in (1, 2)]
            exact = (b0 * x + b1 * past[0] + b2 * past[1] - a1 * out[0] - a2 * out[1]) / 16
            answer.append(Fraction(round(exact * 2**200), 2**200))
        signal = answer
    expected = np.array([float(signal[n]) for n in grid.indices])
    assert len(found) == len(grid.indices) == len(set(grid.indices))
    assert np.max(np.abs(found - expected)) <= 1e-14 * np.max(np.abs(expected))


def test_exact_pulse_is_rounded_to_integers() -> None:
    one = sampled(blocks(Lowpass("butterworth", 2, fmpq(1))), 40, "bilinear")
    grid = Grid.over(200, 32, 16)
    gain = fmpq(2) ** 50
    expected = pulse(one.sections(200), grid.indices[-1] + 1)
    found = exact_pulse(one, gain, grid)
    assert all(abs(float(expected[n] * gain) - value) <= 0.51 for n, value in zip(grid.indices, found, strict=True))
    assert all(value == round(value) for value in found)


def test_total_adds_everything() -> None:
    for length in range(1, 20):
        values = np.arange(2.0 * length).reshape(2, length)
        assert list(total(values)) == [sum(map(float, row)) for row in values]


@pytest.mark.parametrize(
    ("a", "samples"),
    [
        ((16384, -16364, 0), round(8 * 16384 / 20)),
        ((16384, -32768 + 40, 16384 - 20), 13104),
        ((16384, 0, 0), 8),
        ((16384, -16404, 0), round(4 * 16384 / 20)),
        ((16384, 0, 16384), round(4 * 2 * np.pi / np.sqrt(2))),
    ],
    ids=["real pole", "pair", "no poles", "growing", "undamped, a quarter of the rate"],
)
def test_transient_samples(a: tuple[int, int, int], samples: int) -> None:
    assert transient_samples([Integers((1, 0, 0), 0, a, 14)]) == pytest.approx(samples, abs=8)


def test_a_lucky_rounding_is_kept() -> None:
    """Coefficients that the words hold exactly: nothing is left to search, and nothing is moved."""
    b, a = (fmpq(1, 16), fmpq(1, 8), fmpq(1, 16)), (fmpq(-3, 2), fmpq(3, 4))
    plain = PlainSampled(((b, a),))
    best = direct_program(plain, Arithmetic(), Signals(), "probe")
    assert integers(best) == integers(direct_program(plain, Arithmetic(), Signals(), "probe", search=False))


def test_narrow_notch_is_not_moved() -> None:
    one = sampled(blocks(Notch(fmpq(50), fmpq(30))), 1000, "bilinear")
    report = choice_report(searched(one), one)
    assert report.chosen_error <= report.nearest_error * 1.01
