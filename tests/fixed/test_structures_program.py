"""The structures' programs, sample by sample: against independent models, their bounds, and the compiled C."""

import random
from fractions import Fraction
from math import floor

import numpy as np
import pytest

from afterkick.bench import run_on_host
from afterkick.design.schema import Arithmetic, Signals
from afterkick.emit import emit_c
from afterkick.errors import Refused
from afterkick.fixed import direct_program, simulate, trace
from afterkick.fixed.bounds import worst_input
from afterkick.fixed.program import Role, Sum
from afterkick.fixed.ranges import analyse
from afterkick.fixed.transposed import transposed_program
from afterkick.fixed.worst_case import WorstCase
from afterkick.numbers import working_bits
from fixed.random_designs import PlainSampled, _poles, _zeros, random_codes
from fixed.structure_designs import HALF, NEW, STABLE_CASES, WIDE, at, build, response_of_steps


def rounded(value: Fraction, rounding: str) -> int:
    if rounding == "floor":
        return floor(value)
    if rounding == "even":
        return round(value)
    return floor(value + Fraction(1, 2))


def fitted(value: int, bits: int, overflow: str) -> int:
    half = 1 << (bits - 1)
    if overflow == "wrap":
        return (value + half) % (2 * half) - half
    return min(max(value, -half), half - 1)


def random_sampled(draw, order_of_sections):
    coefficient_bits = draw.randint(10, 28)
    closest = min(max(2.0 ** (9 - coefficient_bits), 1e-3), 0.05)
    sections = tuple((_zeros(draw, n), _poles(draw, n, closest)) for n in order_of_sections)
    return PlainSampled(sections, draw.choice((0, 0, 1, 3))), coefficient_bits


def same_integers(one, other):
    return all(
        (a.b, a.b_fraction_bits, a.a, a.a_fraction_bits) == (b.b, b.b_fraction_bits, b.a, b.a_fraction_bits)
        for a, b in zip(one.sections, other.sections, strict=True)
    )


def test_transposed_gives_the_bits_of_direct():
    """With the same integers and no rounding of the numerator on its own, whatever saturates, wraps or rounds."""
    compared = 0
    for seed in range(400):
        draw = random.Random(seed)
        filtered, coefficient_bits = random_sampled(draw, [draw.choice((1, 2)) for _ in range(draw.randint(1, 3))])
        arithmetic = Arithmetic(
            data_bits=draw.randint(8, 28),
            coefficient_bits=coefficient_bits,
            rounding=draw.choice(("nearest", "floor", "even")),
            overflow=draw.choice(("saturate", "wrap")),
        )
        try:
            direct = direct_program(filtered, arithmetic, Signals(), "probe", search=False)
            transposed = transposed_program(filtered, arithmetic, Signals(), "probe", search=False)
        except Refused:
            continue
        if not same_integers(direct, transposed) or any(word.name.startswith("t") for word in direct.words):
            continue
        codes = random_codes(direct, seed, 40)
        assert simulate(direct, codes).tolist() == simulate(transposed, codes).tolist(), seed
        compared += 1
    assert compared >= 20


@pytest.mark.parametrize("seed", range(25))
def test_transposed_against_the_difference_equation(seed):
    """One rounding of the whole sum over past inputs and outputs, in fractions."""
    draw = random.Random(seed)
    filtered, coefficient_bits = random_sampled(draw, [draw.choice((1, 2))])
    options = {"rounding": draw.choice(("nearest", "floor", "even")), "overflow": draw.choice(("saturate", "wrap"))}
    arithmetic = Arithmetic(data_bits=draw.randint(8, 24), coefficient_bits=coefficient_bits, **options)
    program = transposed_program(filtered, arithmetic, Signals(), "probe", search=False)
    (section,) = program.sections
    codes = random_codes(program, seed, 40)
    b = [Fraction(value, 1) / Fraction(2) ** section.b_fraction_bits for value in section.b]
    a = [Fraction(value, 1) / Fraction(2) ** section.a_fraction_bits for value in section.a]
    delayed = [0] * filtered.delay_samples + codes
    outputs: list[int] = []
    for n in range(len(codes)):
        total = sum(b[i] * delayed[n - i] for i in range(3) if n >= i)
        total -= sum(a[i] * outputs[n - i] for i in (1, 2) if n >= i)
        outputs.append(fitted(rounded(total, options["rounding"]), arithmetic.data_bits, options["overflow"]))
    assert simulate(program, codes).tolist() == outputs


def test_transposed_states_are_exact_and_never_overflow():
    program = build("transposed", at("low-pass 8", 20))
    assert all(step.right_shift == 0 for step in program.steps if isinstance(step, Sum) and step.dest.startswith("s"))
    states = {word.name for word in program.words if word.role is Role.STATE}
    assert max(program.word(name).bits for name in states) > 32
    assert not states & analyse(program).may_overflow


@pytest.mark.parametrize("seed", range(15))
def test_delta_against_its_recurrence(seed):
    """s1, s2 and w in fractions, with the roundings where the docstring of the structure has them."""
    draw = random.Random(seed)
    model = draw.choice(["low-pass 2", "high-pass 2", "notch", "resonator", "gain 10/3", "lead-lag", "low-pass 1"])
    rounding = draw.choice(("nearest", "floor", "even"))
    method = draw.choice(("zero-order-hold", "bilinear"))
    program = build(
        "delta",
        at(model, draw.choice((10, 100, 5000)), method),
        rounding=rounding,
        coefficient_bits=draw.randint(12, 24),
    )
    (section,) = program.sections
    b = [Fraction(value) / Fraction(2) ** section.b_fraction_bits for value in section.b]
    a = [Fraction(value) / Fraction(2) ** section.a_fraction_bits for value in section.a]
    states = [word for word in program.words if word.role is Role.STATE]
    places = [Fraction(2) ** (program.word("y").fraction_bits - word.fraction_bits) for word in states]
    order = len(states)
    n = [b[0], b[0] + b[1]] if order == 1 else [b[0], b[1] + 2 * b[0], sum(b)]
    c = [1 + a[1]] if order == 1 else [2 + a[1], sum(a)]
    s = [Fraction(0)] * order
    codes = random_codes(program, seed, 40)
    outputs = []
    for x in codes:
        w = places[0] * rounded((n[0] * x + s[0]) / places[0], rounding)
        outputs.append(fitted(rounded(w, rounding), 16, "saturate"))
        driven = [n[i + 1] * x - c[i] * w + (s[i + 1] if i + 1 < order else 0) for i in range(order)]
        s = [
            place * fitted(int(old / place) + rounded(new / place, rounding), word.bits, "saturate")
            for old, new, place, word in zip(s, driven, places, states, strict=True)
        ]
    assert simulate(program, codes).tolist() == outputs


@pytest.mark.parametrize("seed", range(12))
def test_coupled_against_its_rotation(seed):
    draw = random.Random(seed)
    model = draw.choice(["low-pass 2", "notch", "resonator", "gain 10/3"])
    rounding = draw.choice(("nearest", "floor", "even"))
    program = build("coupled", at(model, draw.choice((10, 50, 300))), rounding=rounding)
    section = program.sections[-1]
    exact = {c.name: Fraction(c.integer) / Fraction(2) ** c.fraction_bits for c in section.coefficients}
    states = [word for word in section.words if word.role is Role.STATE]
    place = Fraction(2) ** (program.word("y").fraction_bits - states[0].fraction_bits)
    r, q, d, p1, p2 = (exact.get(name, Fraction(0)) for name in ("r", "q", "d", "p1", "p2"))
    s1 = s2 = Fraction(0)
    codes = random_codes(program, seed, 40)
    outputs = []
    past = [0, 0]
    for x in codes:
        u = Fraction(x)
        if len(program.sections) == 2:
            front = program.sections[0]
            power = Fraction(2) ** -front.b_fraction_bits
            u = sum(value * power * past_x for value, past_x in zip(front.b, [x, *past], strict=True))
            past = [x, past[0]]
        w = place * rounded((d * u + s1) / place, rounding)
        outputs.append(fitted(rounded(w, rounding), 16, "saturate"))
        new1, new2 = r * s1 - q * s2 + p1 * u, q * s1 + r * s2 + p2 * u
        s1, s2 = (
            place * fitted(rounded(new / place, rounding), word.bits, "saturate")
            for new, word in zip((new1, new2), states, strict=True)
        )
    assert simulate(program, codes).tolist() == outputs


@pytest.mark.parametrize(("structure", "model"), STABLE_CASES)
def test_every_input_stays_within_the_bounds(structure, model):
    """Ranges and rounding errors against the exact rational filter, for the worst input, squares, steps and noise."""
    program = build(structure, at(model, 16, "bilinear"), coefficient_bits=20)
    worst = WorstCase(program)
    ranges = {one.word: one for one in worst.ranges}
    if structure != "transposed":
        # the power of two between its sections is rounded, so that the worst input may just clip there, as in direct
        assert [one.word for one in worst.ranges if not one.fits] == []
    output = ranges[program.output]
    response = response_of_steps(program)
    exact = [float(value) for value in (Fraction(int(x.numerator), int(x.denominator)) for x in response.samples(2000))]
    inputs = [worst_input(program, worst.to_input[program.output], worst.peak_code)[-1500:].tolist()]
    inputs.append(random_codes(program, 5, 60))
    for codes in inputs:
        run = trace(program, codes)
        ideal = np.convolve(codes, exact)[: len(codes)]
        assert np.max(np.abs(run.outputs - ideal)) <= output.from_rounding * (1 + 1e-9) + 1e-6
        assert structure == "transposed" or not any(run.overflows.values())
    assert np.max(np.abs(simulate(program, inputs[0]))) >= 0.98 * (output.from_input) - 1


@pytest.mark.parametrize("rate", [20, 5000])
@pytest.mark.parametrize("model", ["low-pass 2", "low-pass 8", "elliptic 6", "notch", "resonator"])
@pytest.mark.parametrize("structure", WIDE)
def test_states_round_less_than_half_a_count(structure, model, rate):
    """Together with the output's own half: nothing is left once the input has gone."""
    try:
        program = build(structure, at(model, rate))
    except Refused:
        assert structure == "coupled"
        assert rate == 5000
        return
    ranges = {one.word: one for one in WorstCase(program).ranges}
    assert ranges["y"].from_rounding < 1
    assert all(one.fits for one in ranges.values())


@pytest.mark.parametrize("model", ["low-pass 2", "low-pass 8", "notch", "low-pass 1"])
@pytest.mark.parametrize("structure", WIDE)
def test_silence_after_the_input_has_gone(structure, model):
    program = build(structure, at(model, 100), signals=HALF)
    codes = [9000] * 400 + [0] * 6000
    assert simulate(program, codes)[-1000:].tolist() == [0] * 1000


@pytest.mark.parametrize("structure", NEW)
def test_state_bits_are_kept(structure):
    filtered = at("low-pass 2", 20)
    for bits in (22, 24, 30):
        program = build(structure, filtered, state_bits=bits)
        states = [word.bits for word in program.words if word.role is Role.STATE]
        assert all(width == bits for width in states if structure != "transposed")
        assert max(states) == bits
    if structure == "transposed":
        assert any(step.right_shift for step in program.steps if isinstance(step, Sum) and step.dest != "y")
    narrow, wide = (
        next(
            one.from_rounding
            for one in WorstCase(build(structure, filtered, state_bits=bits)).ranges
            if one.word == "y"
        )
        for bits in (22, 30)
    )
    assert wide < narrow


def test_states_that_are_too_narrow_are_refused():
    with pytest.raises(Refused, match=r"arithmetic\.state_bits, section 1: states of 16 bits") as caught:
        build("delta", at("low-pass 2", 100), signals=Signals(), state_bits=16)
    assert "remedy" in str(caught.value)


@pytest.mark.parametrize(
    ("structure", "model", "rate", "words"),
    [
        ("parallel", "three equal lags", 20, ("repeated pole", 'structure = "delta"')),
        ("coupled", "low-pass 2", 20_000, ("section 1", "significant bits", "delta structure")),
        ("transposed", "low-pass 2", 20_000, ("section 1", "unit circle", "remedy")),
    ],
)
def test_refusals_name_section_and_remedy(structure, model, rate, words):
    with pytest.raises(Refused) as caught:
        build(structure, at(model, rate))
    for word in words:
        assert word in str(caught.value)


@pytest.mark.parametrize("structure", NEW)
def test_narrow_accumulators_are_obeyed_or_refused(structure):
    program = build(structure, at("low-pass 2", 8), data_bits=8, coefficient_bits=8, accumulator_bits=32)
    assert {step.accumulator_bits for step in program.steps if isinstance(step, Sum)} == {32}
    with pytest.raises(Refused, match=r"accumulator_bits = 64|wider coefficients"):
        build(structure, at("low-pass 2", 30), data_bits=24, coefficient_bits=24, accumulator_bits=32)


COMPILED = [
    (structure, model, rate, options)
    for structure in NEW
    for model, rate, options in (
        ("low-pass 2", 50, {}),
        ("elliptic 6", 20, {"rounding": "even", "data_bits": 12}),
        ("band-pass 8", 40, {"rounding": "floor", "coefficient_bits": 24}),
        ("integrator, lag", 100, {"overflow": "wrap", "data_bits": 24}),
    )
]


@pytest.mark.parametrize(("structure", "model", "rate", "options"), COMPILED)
def test_compiled_c_gives_the_same_bits(structure, model, rate, options):
    program = build(structure, at(model, rate, "bilinear"), signals=Signals(), **options)
    codes = np.array([random_codes(program, seed, 60) for seed in range(3)]).T
    found = run_on_host(emit_c(program), program, codes)
    assert found.selftest == -1
    assert found.outputs.tolist() == simulate(program, codes).tolist()


def test_long_states_are_compiled_too():
    program = build("delta", at("low-pass 2", 200_000))
    assert max(word.bits for word in program.words if word.role is Role.STATE) > 32
    codes = np.array([20_000] * 3000 + [-32_768] * 3000)
    found = run_on_host(emit_c(program), program, codes)
    assert found.selftest == -1
    assert found.outputs.tolist() == simulate(program, codes).tolist()


@pytest.mark.parametrize("structure", NEW)
def test_programs_do_not_depend_on_the_working_precision(structure):
    found = []
    for bits in (64, 1024):
        with working_bits(bits):
            found.append(build(structure, at("elliptic 6", 40)))
    assert found[0] == found[1]


def test_delay_is_a_chain_in_front():
    for structure in NEW:
        if structure == "parallel":
            continue
        filtered = PlainSampled((([0.3, 0.2], [-0.9, 0.3]),), 3)
        program = build(structure, filtered)
        late = simulate(program, [1000, *[0] * 20])
        assert late[:3].tolist() == [0, 0, 0]
        assert late[3] != 0
