"""Controllers: what integrates is a wide state that a clamp holds, that loses nothing and starts without a bump."""

import random
from fractions import Fraction
from math import ceil, floor, pi

import control
import numpy as np
import pytest
from flint import fmpq

from afterkick.bench import run_on_host
from afterkick.design.schema import Gain, Integrator, Lag, LeadLag, Pid, Signal, Signals
from afterkick.emit import emit_c
from afterkick.errors import Refused
from afterkick.fixed import simulate, trace
from afterkick.fixed.bounds import bounds
from afterkick.fixed.linear import LinearSystem
from afterkick.fixed.program import Sum
from afterkick.fixed.simulate import preset_state
from afterkick.numbers import working_bits
from fixed.random_designs import random_codes
from fixed.structure_designs import build, response_of_steps, transfer_of_sections
from helpers import blocks, ratio, sampled

DRIVE = Signals(Signal("deg", fmpq(40), fmpq(20)), Signal("V", fmpq(10)))

# zeros at 8 Hz, poles at 400 Hz, in both doubled: as a compensator with two coincident zeros and two coincident poles
# is laid out in H. D. Venable, "The K factor: a new mathematical tool for stability analysis and synthesis",
# Powercon 10, 1983 (from memory).
MODELS = {
    "pi": blocks(Pid(fmpq(1, 5), fmpq(3))),
    "pid": blocks(Pid(fmpq(1, 10), fmpq(2), fmpq(1, 500), derivative_corner_hz=fmpq(30))),
    "type 2": blocks(Integrator(fmpq(20)), LeadLag(fmpq(8), fmpq(400), fmpq(1, 10))),
    "type 3": blocks(
        Integrator(fmpq(20)), LeadLag(fmpq(8), fmpq(400), fmpq(1, 10)), LeadLag(fmpq(8), fmpq(400), fmpq(1, 10))
    ),
    "integrator and lag": blocks(Integrator(fmpq(5)), Lag(corner_hz=fmpq(3))),
}
METHODS = ("backward-difference", "bilinear", "zero-order-hold")
RATE = 2000


def controller(model, method="backward-difference", **arithmetic):
    filtered = sampled(MODELS[model], RATE, method)
    return build("parallel", filtered, signals=DRIVE, **arithmetic), filtered


def proofs(model, method="backward-difference", **arithmetic):
    program, filtered = controller(model, method, **arithmetic)
    held = None if method == "zero-order-hold" else sampled(MODELS[model], RATE, "zero-order-hold")
    return program, bounds(program, filtered, held)


def integrating_sum(program):
    return next(
        step
        for step in program.steps
        if isinstance(step, Sum) and step.limits and step.dest in {t.word for t in step.terms}
    )


def test_pid_against_its_difference_equations():
    """The textbook algorithm: proportional part, integral part and filtered derivative part, each with its own memory,
    the integral and the sum held within the limits of the actuator; in fractions.

    K. J. Astrom, B. Wittenmark, "Computer-Controlled Systems", digital PID: D(k) = Td/(Td + N h) D(k-1)
    + K Td N/(Td + N h) (e(k) - e(k-1)); the integral by backward differences (from memory).
    """
    program, _ = controller("pid", coefficient_bits=28, clamp=(fmpq(-8), fmpq(9)))
    kp, ki, kd, corner = (Fraction(1, 10), Fraction(2), Fraction(1, 500), 2 * Fraction(pi) * 30)
    h, count = Fraction(1, RATE), Fraction(10, 1 << 15)
    draw = random.Random(5)
    codes, level = [], 0
    for _ in range(12):
        level = draw.randint(-12_000, 12_000)
        codes += [level + draw.randint(-300, 300) for _ in range(250)]
    found = simulate(program, codes)
    integral = derivative = Fraction(0)
    before = Fraction(0)
    acted = False
    for code, output in zip(codes, found.tolist(), strict=True):
        e = Fraction(code * 40, 1 << 15)
        derivative = (derivative + kd * corner * (e - before)) / (1 + corner * h)
        # what the backward difference adds in the same sample is not yet in the state that is held
        exact = kp * e + derivative + integral + ki * h * e
        acted |= not -8 <= exact <= 9
        assert abs(min(max(exact, Fraction(-8)), Fraction(9)) - output * count) <= 2 * count
        integral = min(max(integral + ki * h * e, Fraction(-8)), Fraction(9))
        before = e
    assert acted


@pytest.mark.parametrize("method", METHODS)
@pytest.mark.parametrize("model", MODELS)
def test_integral_gain_is_that_of_the_model(model, method):
    """What a constant input adds in each sample is the residue of H at s = 0 times T, whatever the method."""
    program, found = proofs(model, method, coefficient_bits=24)
    with working_bits(128):
        exact = float(MODELS[model].origin_coefficient().mid()) / RATE * 40 / 10
    assert found.integration.per_sample == pytest.approx(abs(exact), rel=1e-6)
    assert response_of_steps(program).denominator(fmpq(1)) == 0


@pytest.mark.parametrize("model", MODELS)
def test_nothing_is_lost_in_the_integral(model):
    """One count for a long time is integrated, and taken away again, without any rounding."""
    program, found = proofs(model)
    assert found.integration.smallest_code == 1
    state = integrating_sum(program).dest
    run = trace(program, [1] * 700 + [-1] * 700)
    assert run.state[state] == 0
    assert trace(program, [1] * 700).state[state] != 0


@pytest.mark.parametrize("rounding", ["nearest", "floor", "even"])
@pytest.mark.parametrize("bits", [17, 19, 21])
def test_smallest_error_that_integrates(bits, rounding):
    """In narrow states some errors are lost: the smallest that is not, by trying all."""
    program, found = proofs("pi", state_bits=bits, rounding=rounding, coefficient_bits=24)
    state = integrating_sum(program).dest

    def moves(code):
        return trace(program, [code] * 3).state[state] != 0

    smallest = next(code for code in range(1, 5000) if moves(code) and moves(-code))
    assert found.integration.smallest_code == smallest
    assert smallest > 1


def test_error_feedback_loses_nothing_in_narrow_states():
    program, found = proofs("pi", state_bits=20, coefficient_bits=24, carry=1)
    assert found.integration.smallest_code == 1
    assert found.output.growth < 1e-2 * proofs("pi", state_bits=20, coefficient_bits=24)[1].output.growth
    codes = [3] * 4000
    exact = response_of_steps(program).samples(4000)
    assert abs(int(simulate(program, codes)[-1]) - 3 * float(sum(exact))) <= 1


def test_clamp_does_not_wind_up():
    """Driven against its limit for a second, the output leaves it with the sign of the error, and not later."""
    program, _ = controller("pi", clamp=(fmpq(-4), fmpq(6)))
    high, low = floor(Fraction(6, 10) * (1 << 15)), ceil(Fraction(-4, 10) * (1 << 15))
    codes = [4000] * RATE + [-1000] * 40
    found = simulate(program, codes)
    assert found[RATE - 1] == high
    assert found.max() == high
    assert (np.diff(found[RATE:]) < 0).all()
    assert found[RATE] < high
    assert simulate(program, [-16_000] * 4 * RATE).min() == low
    unlimited, _ = controller("pi")
    assert simulate(unlimited, [16_000] * 4 * RATE).max() == 32_767


def test_a_filter_that_does_not_integrate_is_held_too():
    filtered = sampled(blocks(Lag(corner_hz=fmpq(30)), Gain(fmpq(2))), RATE, "zero-order-hold")
    program = build("parallel", filtered, signals=DRIVE, clamp=(fmpq(-1), fmpq(3)))
    found = simulate(program, [16_000] * 500 + [-16_000] * 500)
    assert (found.min(), found.max()) == (ceil(Fraction(-1, 10) * (1 << 15)), floor(Fraction(3, 10) * (1 << 15)))
    assert program.preset is None


def test_clamp_without_a_code_is_refused():
    with pytest.raises(Refused, match=r"arithmetic\.clamp"):
        controller("pi", clamp=(fmpq(1, 100_000), fmpq(2, 100_000)))


@pytest.mark.parametrize("options", [{}, {"rounding": "floor"}, {"state_bits": 22, "rounding": "even"}, {"carry": 1}])
@pytest.mark.parametrize("method", METHODS)
@pytest.mark.parametrize("model", MODELS)
def test_preset_starts_without_a_bump(model, method, options):
    """The next output is the wanted one, within one code; with an input of zero it stays there."""
    program, _ = controller(model, method, coefficient_bits=18, **options)
    draw = random.Random(model + method)
    for _ in range(50):
        code, wanted = draw.randint(-400, 400), draw.randint(-12_000, 12_000)
        assert abs(int(trace(program, [code], preset_state(program, code, wanted)).outputs[0]) - wanted) <= 1
        held = trace(program, [0] * 300, preset_state(program, 0, wanted)).outputs
        assert np.abs(held - wanted).max() <= 1


def test_preset_needs_codes_and_an_integral():
    program, _ = controller("pi")
    with pytest.raises(Refused, match="wanted: 40000"):
        preset_state(program, 0, 40_000)
    lag = build("parallel", sampled(blocks(Lag(corner_hz=fmpq(30))), RATE, "bilinear"))
    with pytest.raises(Refused, match="no preset"):
        preset_state(lag, 0, 0)


@pytest.mark.parametrize("options", [{}, {"state_bits": 20}, {"clamp": (fmpq(-3), fmpq(5)), "rounding": "floor"}])
@pytest.mark.parametrize("method", METHODS)
@pytest.mark.parametrize("model", MODELS)
def test_bounds_are_never_exceeded(model, method, options):
    """Every word within its range whatever the clamp does; the output near the exact filter while it does nothing."""
    program, found = proofs(model, method, **options)
    assert found.proved
    peak, limits = found.peak_code, {word.word: word for word in found.words}
    draw = np.random.default_rng(3)
    stimuli = [
        np.full(3000, peak - 1),
        np.where(np.arange(3000) % 600 < 300, peak - 1, -peak),
        draw.integers(-peak, peak, 3000),
        np.where(draw.random(3000) < 0.02, peak - 1, 0),
    ]
    for codes in stimuli:
        state: dict[str, int] = {}
        for part in np.split(codes, 60):
            run = trace(program, part, state)
            state = {name: int(value) for name, value in run.state.items()}
            assert not run.overflows or not any(run.overflows.values())
            for name, value in [*state.items(), *((program.output, code) for code in run.outputs.tolist())]:
                if name in limits:
                    assert limits[name].lowest <= value <= limits[name].highest
    exact = np.array([float(value) for value in LinearSystem(program).responses(None)[program.output].samples(400)])
    model_pulse = _exact_pulse(model, method, 400)
    small = draw.integers(-40, 40, 400)
    output = simulate(program, small)
    for n in (0, 1, 10, 399):
        ideal = float(np.dot(model_pulse[: n + 1][::-1], small[: n + 1]))
        allowed = found.output.rounding + (found.output.coefficients + n * found.output.growth) * 40 / peak
        # what roundings add each sample does not shrink with the input
        allowed += n * found.output.growth
        assert abs(output[n] - ideal) <= allowed
    assert np.abs(exact - model_pulse).sum() * peak <= found.output.coefficients + 400 * found.output.growth + 1e-6


def _exact_pulse(model, method, length):
    """Of the exact sampled filter, in output codes per input code."""
    filtered = sampled(MODELS[model], RATE, method)
    with working_bits(256):
        return np.array([float(value.mid()) * 4 for value in filtered.pulse(range(length))])


def test_growth_of_an_exact_integral_is_none():
    """ki T as a power of two is stored exactly: the distance from the model is bounded for ever."""
    filtered = sampled(blocks(Pid(fmpq(1, 2), fmpq(1, 4))), 1024, "zero-order-hold")
    program = build("parallel", filtered)
    found = bounds(program, filtered, None)
    assert found.output.growth == 0
    assert found.output.total < 0.51
    assert found.dead_band == 0


def test_growth_is_reached():
    """A full-scale input of the worst signs parts the integers from the exact filter as fast as the bound says."""
    program, found = proofs("pi", "zero-order-hold", coefficient_bits=10)
    exact = _exact_pulse("pi", "zero-order-hold", 3000)
    ours = np.array([float(value) for value in response_of_steps(program).samples(3000)])
    reached = np.abs(ours - exact).sum() * found.peak_code
    limit = found.output.coefficients + 3000 * found.output.growth
    assert 0.98 * limit <= reached <= limit


def test_two_integrators_are_built_but_nothing_is_proved():
    filtered = sampled(ratio([1, 40, 400], [1, 0, 0]), 1000, "bilinear")
    program = build("parallel", filtered, coefficient_bits=24)
    assert not bounds(program, filtered, None).proved
    denominator = transfer_of_sections(program).denominator
    assert denominator(fmpq(1)) == denominator.derivative()(fmpq(1)) == 0


@pytest.mark.parametrize(
    ("model", "method", "options"),
    [
        ("pi", "bilinear", {}),
        ("pid", "backward-difference", {"clamp": (fmpq(-3), fmpq(5)), "rounding": "even"}),
        ("type 3", "bilinear", {"data_bits": 12, "state_bits": 28, "carry": 1}),
        ("integrator and lag", "zero-order-hold", {"data_bits": 24, "rounding": "floor", "overflow": "wrap"}),
    ],
)
def test_compiled_controllers_give_the_same_bits(model, method, options):
    program, _ = controller(model, method, **options)
    codes = np.array([random_codes(program, seed, 60) for seed in range(3)]).T
    found = run_on_host(emit_c(program), program, codes)
    assert found.selftest == -1
    assert found.outputs.tolist() == simulate(program, codes).tolist()


def test_self_test_covers_the_preset():
    """A sign turned in the statements of the preset is found, and nowhere before."""
    program, _ = controller("pid", "bilinear")
    files = emit_c(program)
    source = files["probe.c"]
    start = source.index("void probe_preset")
    statements = [line for line in source[start : source.index("}", start)].splitlines() if " -= " in line]
    assert statements
    for line in statements:
        changed = files | {"probe.c": source.replace(line, line.replace(" -= ", " += "))}
        assert run_on_host(changed, program, np.zeros((4, 1), dtype=np.int64)).selftest > 1000


def test_closed_loop_against_python_control():
    """The integers as the controller of a sampled plant, against the loop that the library control computes in doubles.

    As long as no clamp acts they differ by what the converter and the output word round, taken through the loop.
    """
    filtered = sampled(blocks(Pid(fmpq(2), fmpq(3))), 50, "bilinear")
    volts = Signals(Signal("V", fmpq(8)), Signal("V", fmpq(8)))
    program = build("parallel", filtered, signals=volts, coefficient_bits=20)
    continuous = control.tf([2, 3], [1, 0])
    plant = control.tf([1], [0.5, 1])
    digital = control.sample_system(continuous, 1 / 50, method="bilinear")
    held = control.sample_system(plant, 1 / 50, method="zoh")
    expected = control.step_response(control.feedback(digital * held, 1), np.arange(500) / 50).outputs
    (gain,), (one, pole) = held.num[0][0], held.den[0][0]
    count = 8 / (1 << 15)
    level, state, outputs = 0.0, {}, []
    for _ in range(500):
        outputs.append(level)
        run = trace(program, [round((1 - level) / count)], state)
        state = {name: int(value) for name, value in run.state.items()}
        level = (gain * int(run.outputs[0]) * count - pole * level) / one
    assert np.abs(np.array(outputs) - expected).max() < 3 * count
    assert abs(outputs[-1] - 1) <= count


def test_a_coefficient_that_is_a_short_fraction_keeps_its_meaning():
    """The ideal derivative has its pole at z = -1: 1 + a1 is 2, in whatever last places the transfer function needs."""
    filtered = sampled(blocks(Pid(fmpq(1, 10), fmpq(2), fmpq(1, 500))), RATE, "bilinear")
    program = build("parallel", filtered, signals=DRIVE, coefficient_bits=12)
    assert any(section.a[:2] == (1, 1) for section in program.sections)


def test_large_parts_find_room_in_the_accumulator():
    """A gain of 4000 in 32 bits, and an integral whose exact state would need as many fraction bits as that leaves."""
    filtered = sampled(blocks(Pid(fmpq(1000), fmpq(1, 3))), RATE, "backward-difference")
    program = build("parallel", filtered, signals=DRIVE, coefficient_bits=32, data_bits=24)
    assert all(one.bits <= one.accumulator_bits for one in bounds(program, filtered, None).sums)


def test_states_that_take_in_nothing_are_refused():
    slow = sampled(blocks(Pid(fmpq(1, 5), fmpq(1, 10**6))), RATE, "bilinear")
    with pytest.raises(Refused, match=r"arithmetic\.state_bits, section 1: states of 17 bits, .* rounded to nothing"):
        build("parallel", slow, signals=DRIVE, state_bits=17)
