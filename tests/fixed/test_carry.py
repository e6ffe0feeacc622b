"""Error feedback: published noise gains, the difference equation by hand, dead bands, and what is refused."""

from fractions import Fraction
from math import cos, exp, floor, pi, sqrt

import numpy as np
import pytest
from attrs import evolve

from afterkick.errors import Refused
from afterkick.fixed import Program, simulate, trace
from afterkick.fixed.carry import with_carry
from afterkick.fixed.narrow import residue_limits, shift_right
from afterkick.fixed.program import Move, Overflow, Role, Rounding, Sum, Term
from afterkick.fixed.ranges import analyse, require_valid
from afterkick.fixed.worst_case import WorstCase
from fixed.carried_designs import carried_program, transposed
from fixed.random_designs import program_of, random_codes, random_program

# Noise gain of 1/(1 - 2 r cos(theta)/z + r^2/z^2) for one white rounding source at the adder: without feedback, with
# error filter 1 - 1/z, with (1 - 1/z)^2.  Source of the method: Oppenheim and Schafer, sections 6.9 and 6.10; Higgins
# and Munson 1982; Laakso and Hartimo 1992.  Confidence: derived from the closed forms of these sources, and checked
# against sums over 2e5 samples; no printed numeric example was at hand.
NOISE_GAINS = [
    (0.9, 0.7853981633974483, (5.752258794440968, 3.414539510163157, 3.1318422511789445)),
    (0.95, 0.39269908169872414, (36.257152880989416, 5.607857654362926, 1.9186101046311794)),
    (0.99, 0.19634954084936207, (665.0910688266, 25.624963513604456, 1.9973414916037093)),
]


def slow_low_pass(quality: float, per_corner_period: int) -> tuple[list[float], list[float]]:
    """Second order, DC gain 1 up to the last bits: poles by e^(sT), both zeros at z = -1."""
    w = 2 * pi / per_corner_period
    damping = 1 / (2 * quality)
    radius = exp(-damping * w)
    a = [-2 * radius * cos(w * sqrt(1 - damping**2)), radius**2]
    gain = (1 + sum(a)) / 4
    return [gain, 2 * gain, gain], a


def carried_equations(program: Program, codes: list[int]) -> list[int]:
    """Direct form I in integers, section after section, each recursive division with its own memory of remainders."""
    signal = ([0] * program.delay_samples + list(codes))[: len(codes)]
    factors = {1: (1,), 2: (2, -1)}[program.carry]

    def divided(total: int, places: int) -> int:
        exact = Fraction(total, 2**places)
        if program.rounding is Rounding.EVEN:
            return round(exact)
        return floor(exact + Fraction(1, 2)) if program.rounding is Rounding.NEAREST else floor(exact)

    for section in program.sections:
        feedback = any(section.a[1:])
        scale = section.a_fraction_bits if feedback else max(section.b_fraction_bits, 0)
        surplus = section.b_fraction_bits - scale
        answer: list[int] = []
        dropped = [0, 0]
        for n in range(len(signal)):
            total = sum(b * signal[n - k] for k, b in enumerate(section.b) if n >= k)
            total = divided(total, surplus) if surplus > 0 else total << -surplus
            total -= sum(section.a[k] * answer[n - k] for k in (1, 2) if n >= k)
            if feedback:
                total += sum(factor * value for factor, value in zip(factors, dropped, strict=False))
            quotient = divided(total, scale)
            dropped = [total - (quotient << scale), dropped[0]]
            low, high = -(2 ** (program.data_bits - 1)), 2 ** (program.data_bits - 1) - 1
            if program.overflow is Overflow.SATURATE:
                answer.append(max(low, min(high, quotient)))
            else:
                answer.append((quotient - low) % (high - low + 1) + low)
        signal = answer
    return signal


@pytest.mark.parametrize("rounding", Rounding)
@pytest.mark.parametrize("places", [1, 2, 3, 6])
def test_residue_limits_are_reached_and_never_passed(rounding, places):
    values = range(-300, 301)
    dropped = {value - (shift_right(value, places, rounding) << places) for value in values}
    assert (min(dropped), max(dropped)) == residue_limits(places, rounding)


def test_nothing_is_dropped_without_a_shift():
    assert {residue_limits(0, rounding) for rounding in Rounding} == {(0, 0)}


@pytest.mark.parametrize(("r", "theta", "gains"), NOISE_GAINS, ids=lambda value: str(value)[:6])
def test_published_noise_gains(r, theta, gains):
    """With 30 fraction bits in the coefficients the sum differs by less than 1e-6 from the closed form."""
    plain = program_of(([1], [-2 * r * cos(theta), r * r]), coefficient_bits=32)
    for program, gain in zip((plain, with_carry(plain, 1), with_carry(plain, 2)), gains, strict=True):
        rms = WorstCase(program).noise_rms
        assert rms is not None
        assert rms**2 * 12 == pytest.approx(gain, rel=1e-6)


def test_published_first_order_noise_gain():
    """Pole a: 1/(1 - a^2) without, 2/(1 + a) with error filter 1 - 1/z; source and confidence as above."""
    plain = program_of(([1], [-0.95]), coefficient_bits=32)
    for program, gain in ((plain, 10.256410256410255), (with_carry(plain, 1), 1.0256410256410255)):
        rms = WorstCase(program).noise_rms
        assert rms is not None
        assert rms**2 * 12 == pytest.approx(gain, rel=1e-6)


SEEDS = [seed for seed in range(80) if carried_program(seed) is not None]


@pytest.mark.parametrize("seed", SEEDS)
def test_program_is_its_difference_equations(seed):
    program = carried_program(seed)
    assert program is not None
    codes = random_codes(program, seed, 40)
    assert simulate(program, codes).tolist() == carried_equations(program, codes), f"seed {seed}"


@pytest.mark.parametrize("seed", range(6))
def test_many_stimuli_equal_one_by_one(seed):
    program = with_carry(random_program(seed), 2)
    columns = np.array([random_codes(program, 100 + k, 30) for k in range(20)]).T
    together = trace(program, columns)
    alone = [trace(program, column) for column in columns.T]
    assert all((together.outputs[:, k] == run.outputs).all() for k, run in enumerate(alone))
    assert all((together.state[name] == [run.state[name] for run in alone]).all() for name in together.state)


@pytest.mark.parametrize("order", [1, 2])
def test_dead_band_of_a_slow_low_pass(order):
    """A thousand samples per corner period, 16-bit data: without carry the output rests thousands of counts off."""
    plain = program_of(slow_low_pass(0.7071, 1000), coefficient_bits=32)
    for level in (20_000, -20_000, 12_345, 300, -7):
        codes = [level] * 10_000 + [0] * 30_000
        before = simulate(plain, codes)
        after = simulate(with_carry(plain, order), codes)
        assert abs(after[9_000:10_000] - level).max() <= 1
        assert abs(after[-10_000:]).max() <= 1
        assert abs(level) <= 300 or max(abs(before[9_999] - level), abs(before[-1])) > 5_000


def test_order_2_bounds_the_dead_band_by_one_count():
    plain = program_of(slow_low_pass(0.7071, 1000), coefficient_bits=32)
    parts = [
        WorstCase(program).ranges[-1].from_rounding for program in (plain, with_carry(plain, 1), with_carry(plain, 2))
    ]
    assert parts[0] > 10_000
    assert 50 < parts[1] < 100
    assert parts[2] < 1.5


@pytest.mark.parametrize("rounding", ["nearest", "floor", "even"])
@pytest.mark.parametrize("order", [0, 1, 2])
def test_rounding_bound_holds(order, rounding):
    """The distance from the exact response of the same integers, in rationals, is within the bound and near it."""
    plain = program_of(
        ([0.3, -0.2, 0.1], [-1.6, 0.7]), data_bits=12, coefficient_bits=14, rounding=rounding, scaling="none"
    )
    program = with_carry(plain, order) if order else plain
    (section,) = program.sections
    scale = Fraction(2) ** section.a_fraction_bits / Fraction(2) ** section.b_fraction_bits
    worst = 0.0
    for seed in range(6):
        draw = np.random.default_rng(seed)
        codes = draw.integers(-200, 200, 150).tolist()
        exact: list[Fraction] = []
        for n in range(len(codes)):
            total = scale * sum(b * codes[n - k] for k, b in enumerate(section.b) if n >= k)
            total -= sum(section.a[k] * exact[n - k] for k in (1, 2) if n >= k)
            exact.append(total / section.a[0])
        found = simulate(program, codes).tolist()
        worst = max(worst, *(abs(float(y - x)) for y, x in zip(found, exact, strict=True)))
    bound = WorstCase(program).ranges[-1].from_rounding
    assert 0.15 * bound < worst <= bound


def test_what_is_fed_back_is_what_was_dropped_before_saturation():
    """A full-scale step into a DC gain of 1.5: the output stays at the end of its word, the memory stays small."""
    program = with_carry(program_of(([0.15, 0.15], [-0.8]), data_bits=16, coefficient_bits=16), 1)
    run = trace(program, [32767] * 300)
    assert (run.outputs[20:] == 32767).all()
    (residue,) = [name for name in run.state if name.startswith("dropped")]
    low, high = residue_limits(
        next(s.right_shift for s in program.steps if isinstance(s, Sum) and s.residue), Rounding.NEAREST
    )
    assert low <= run.state[residue] <= high


def test_transposed_section_equals_the_direct_one():
    """With equal binary points and exact states the two forms give the same bits, with error feedback too."""
    b, a, shift = (3000, 6000, 3000), (16384, -25559, 10486), 14
    for order in (1, 2):
        program = with_carry(transposed(b, a, shift), order)
        codes = [code // 16 for code in random_codes(program, order)]
        history = {**dict.fromkeys((-1, -2), 0)}
        dropped = [0, 0]
        expected = []
        for n, code in enumerate(codes):
            past = [codes[n - k] if n >= k else 0 for k in (1, 2)]
            total = b[0] * code + b[1] * past[0] + b[2] * past[1] - a[1] * history[n - 1] - a[2] * history[n - 2]
            total += sum(f * d for f, d in zip({1: (1,), 2: (2, -1)}[order], dropped, strict=False))
            history[n] = (total + (1 << (shift - 1))) >> shift
            dropped = [total - (history[n] << shift), dropped[0]]
            expected.append(history[n])
        assert max(map(abs, expected)) < 32767
        assert simulate(program, codes).tolist() == expected


def test_only_what_is_fed_back_is_carried():
    fir = program_of(([0.25, 0.5, 0.25], []))
    assert with_carry(fir, 1) is fir
    mixed = with_carry(program_of(([0.25, 0.5], []), ([0.5], [-0.5])), 2)
    assert [step.residue for step in mixed.steps if isinstance(step, Sum) and step.residue] == ["dropped_y"]
    assert mixed.carry == 2
    assert [word.name for word in mixed.words if word.name.startswith("dropped")] == [
        "dropped_y",
        "dropped_y_1",
        "dropped_y_2",
    ]


def test_sum_without_room_gets_64_bits_or_is_refused():
    """65535 * 2^15 and half a count of 2^15 leave no room for two residues in 32 bits."""
    program = program_of(([0.5], [-0.5]), coefficient_bits=12)
    (section,) = program.sections
    step = next(step for step in section.steps if isinstance(step, Sum) and step.dest == "y")
    full = evolve(step, terms=(Term(30000, "x"), Term(35535, "y_1")), right_shift=15, accumulator_bits=32)
    steps = (full, *(other for other in section.steps if isinstance(other, Move)))
    words = tuple(word for word in section.words if word.name != "t1")
    crowded = evolve(program, sections=(evolve(section, words=words, steps=steps),))
    require_valid(crowded)
    for order, bits in ((1, 32), (2, 64)):
        carried = with_carry(crowded, order)
        require_valid(carried)
        assert [other.accumulator_bits for other in carried.steps if isinstance(other, Sum)] == [bits]
    with pytest.raises(Refused, match="no room"):
        with_carry(crowded, 2, widest_accumulator=32)


def test_what_makes_no_sense_is_refused():
    program = program_of(([0.5], [-0.5]))
    with pytest.raises(Refused, match="order 1 or 2"):
        with_carry(program, 3)
    with pytest.raises(Refused, match="apply it once"):
        with_carry(with_carry(program, 1), 1)


def test_faulty_residues_are_found():
    program = with_carry(program_of(([0.1, 0.2, 0.1], [-1.2, 0.5]), coefficient_bits=12), 1)
    (section,) = program.sections
    step = next(step for step in section.steps if isinstance(step, Sum) and step.residue)

    def faults(words=section.words, **changes: object) -> str:
        steps = tuple(evolve(other, **changes) if other is step else other for other in section.steps)
        return "; ".join(analyse(evolve(program, sections=(evolve(section, words=words, steps=steps),))).faults)

    assert faults() == ""
    assert "unknown word nonsense" in faults(residue="nonsense")
    assert "no word of its own" in faults(residue="y")
    assert "the input x is written" in faults(residue="x")
    assert "drops nothing" in faults(right_shift=0)
    narrow = tuple(evolve(word, bits=word.bits - 1) if word.name == "dropped_y" else word for word in section.words)
    assert "needs more than" in faults(words=narrow)
    assert "dropped_y before it is written" in faults(residue=None)
    assert any(word.role is Role.STATE for word in section.words if word.name == "dropped_y_1")
    assert Move("dropped_y_1", "dropped_y") in section.steps


def test_state_beyond_its_word_is_refused():
    program = with_carry(program_of(([0.5], [-0.5])), 1)
    with pytest.raises(Refused, match="dropped_y_1 = 99999"):
        trace(program, [0], {"dropped_y_1": 99999})
