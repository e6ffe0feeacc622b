"""The search for pairing and order: against all arrangements there are, against the bounds, against closed forms."""

import itertools
import math
import statistics
from collections.abc import Iterator

import pytest
from attrs import evolve
from flint import fmpq

from afterkick.design.schema import Arithmetic, Bandpass, Lag, Lowpass, Signal, Signals
from afterkick.fixed.arrangement import ROOM, WORTHWHILE, arranged
from afterkick.fixed.direct import direct_program
from afterkick.fixed.program import Program
from afterkick.fixed.worst_case import WorstCase
from afterkick.sampling import Sampled
from afterkick.sampling.pulse_transfer import ZRoot
from afterkick.sampling.rational_cascade import rational_cascade
from afterkick.sampling.sections import Arrangement, in_order, paired_by_rule
from fixed.structure_designs import MODELS, STABLE
from fixed.test_carry import NOISE_GAINS
from helpers import blocks, sampled

NORMS = ("peak-gain", "two-norm", "infinity")
SIGNALS = Signals(Signal("V", fmpq(1), fmpq(3, 4)), Signal("V", fmpq(2)))
SEVERAL = tuple(name for name in STABLE if len(sampled(MODELS[name], 20, "bilinear").sections(128)) > 1)

NEARLY_FULL = evolve(SIGNALS, input=evolve(SIGNALS.input, peak=fmpq(3, 4) * fmpq(round(1e6 * 2**ROOM), 10**6)))
THREE_SECTIONS = {
    "elliptic": blocks(Lowpass("elliptic", 6, fmpq(1), ripple_db=fmpq(1, 2), stop_db=fmpq(60))),
    "odd": blocks(Lowpass("chebyshev", 5, fmpq(1), ripple_db=fmpq(1, 2))),
    "band-pass": blocks(Bandpass("butterworth", 3, fmpq(1, 2), fmpq(2))),
}
# orders times ways to deal out three pairs; one kind of zero; three zeros each at 1 and -1, two to a section
ARRANGEMENTS = {"elliptic": 6 * 6, "odd": 6, "band-pass": 6 * 7}


def program(filtered: Sampled, signals: Signals = SIGNALS, **arithmetic: object) -> Program:
    """The direct program, in which little but roundings differs from the exact filter."""
    return direct_program(filtered, Arithmetic(coefficient_bits=32, **arithmetic), signals, "probe", search=False)


def noise(filtered: Sampled, **arithmetic: object) -> float:
    """From the exact linear responses of the program."""
    found = WorstCase(program(filtered, **arithmetic)).noise_rms
    assert found is not None
    return found


def roomy(filtered: Sampled, norm: str) -> bool:
    """Whether the scaling would be the same for an input that is larger by as much as the words must have to spare."""
    chosen = [program(filtered, signals, scaling=norm).sections for signals in (SIGNALS, NEARLY_FULL)]
    return [one.gain_log2 for one in chosen[0]] == [one.gain_log2 for one in chosen[1]]


def place(roots: list[ZRoot], root: ZRoot) -> int:
    """Of one that is not repeated."""
    return next(i for i, one in enumerate(roots) if one is root)


def every_arrangement(filtered: Sampled) -> Iterator[Arrangement]:
    """All orders of the rule's pole groups, with all zeros in all ways that leave as little room as there is."""
    transfer = filtered.transfer()
    poles, zeros = in_order(transfer.poles), in_order(transfer.zeros)
    assert poles is not None
    assert zeros is not None
    groups = [tuple(place(poles, one) for one in ours) for ours, _ in paired_by_rule(transfer)]
    degrees = [sum(poles[i].degree for i in group) for group in groups]
    seen = set()
    for owners in itertools.product(range(len(groups)), repeat=len(zeros)):
        taken = [tuple(i for i, owner in enumerate(owners) if owner == k) for k in range(len(groups))]
        if any(sum(zeros[i].degree for i in each) > most for each, most in zip(taken, degrees, strict=True)):
            continue
        # zeros at one place are all alike
        kinds = tuple(tuple(complex(zeros[i].value) for i in each) for each in taken)
        if kinds in seen:
            continue
        seen.add(kinds)
        for order in itertools.permutations(range(len(groups))):
            yield Arrangement(tuple(groups[k] for k in order), tuple(taken[k] for k in order))


@pytest.mark.parametrize("norm", NORMS)
@pytest.mark.parametrize("name", THREE_SECTIONS)
def test_best_of_all_arrangements_of_three_sections(name: str, norm: str) -> None:
    """Of those whose words between the sections are not filled to the brim, the least noise.

    With zeros at z = 1 and at -1 a section's scale depends on which of them it has, so that the search, which keeps one
    way on from each state, may miss the best by a part of what a power of two is.
    """
    filtered = sampled(THREE_SECTIONS[name], 20, "bilinear")
    found = arranged(filtered, Arithmetic(scaling=norm), SIGNALS)
    assert found is not None
    every = [evolve(filtered, arrangement=arrangement) for arrangement in every_arrangement(filtered)]
    assert len(every) == ARRANGEMENTS[name]
    least = min(noise(one, scaling=norm) for one in every if roomy(one, norm))
    assert noise(found.sampled, scaling=norm) <= (1.15 if name == "band-pass" else 1.005) * least


@pytest.mark.parametrize("norm", NORMS)
def test_noise_of_the_programs_is_lower_and_as_estimated(norm: str) -> None:
    """Filters of two to eight sections, fast and slow."""
    ratios = []
    for name in SEVERAL:
        for method, rate in (("bilinear", 20), ("zero-order-hold", 200), ("impulse-invariant", 50)):
            if name == "low-pass 16" and method != "bilinear":
                continue
            filtered = sampled(MODELS[name], rate, method)
            found = arranged(filtered, Arithmetic(scaling=norm), SIGNALS)
            if found is None:
                continue
            before, after = noise(filtered, scaling=norm), noise(found.sampled, scaling=norm)
            assert found.noise_by_rule == pytest.approx(before, rel=0.02), (name, method)
            assert found.noise == pytest.approx(after, rel=0.02), (name, method)
            assert after * (1 + 0.9 * WORTHWHILE) < before
            ratios.append(after / before)
    assert len(ratios) > 15
    assert statistics.median(ratios) < 0.85


@pytest.mark.parametrize("rate", [200, 2000, 20000])
def test_slow_filters(rate: int) -> None:
    filtered = sampled(MODELS["elliptic 6"], rate, "bilinear")
    found = arranged(filtered, Arithmetic(), SIGNALS)
    assert found is not None
    assert found.noise_by_rule == pytest.approx(noise(filtered), rel=0.02)
    assert found.noise == pytest.approx(noise(found.sampled), rel=0.02)


@pytest.mark.parametrize("carry", [0, 1, 2])
def test_published_noise_gains(carry: int) -> None:
    """With an output so coarse that the first section's rounding is nothing in it, the last section's is left: by the
    rule that of the most resonant poles, as searched that of the calmest.  Source of the gains: see test_carry."""
    (r, theta, calm), _, (q, phi, resonant) = NOISE_GAINS
    sections = [
        (
            [fmpq(1), 0, fmpq(-1)],
            [fmpq(1), *(fmpq(*float(x).as_integer_ratio()) for x in (-2 * s * math.cos(t), s * s))],
        )
        for s, t in ((r, theta), (q, phi))
    ]
    lag = sampled(blocks(Lag(corner_hz=fmpq(1))), 10, "bilinear")
    filtered = evolve(lag, attempt=lambda: rational_cascade(sections, fmpq(1)))
    signals = Signals(Signal("V", fmpq(1)), Signal("V", fmpq(2) ** 40))
    found = arranged(filtered, Arithmetic(carry=carry, scaling="infinity"), signals)
    if calm[carry] > resonant[carry]:
        assert found is None
        return
    assert found is not None
    assert found.noise_by_rule == pytest.approx(math.sqrt(resonant[carry] / 12), rel=0.02)
    assert found.noise == pytest.approx(math.sqrt(calm[carry] / 12), rel=0.02)


@pytest.mark.parametrize("order", [6, 8])
def test_poles_with_their_nearest_zeros_are_better_than_with_the_farthest(order: int) -> None:
    """From memory: Jackson (1970) and the textbooks after him pair the poles nearest the unit circle with the zeros
    nearest to them, as the rule does.  Of an elliptic filter the opposite is noisier, in either order."""
    model = blocks(Lowpass("elliptic", order, fmpq(1), ripple_db=fmpq(1, 2), stop_db=fmpq(60)))
    filtered = sampled(model, 20, "bilinear")
    transfer = filtered.transfer()
    poles, zeros = in_order(transfer.poles), in_order(transfer.zeros)
    assert poles is not None
    assert zeros is not None
    ours = tuple((place(poles, group[0]),) for group, _ in paired_by_rule(transfer))
    theirs = tuple((place(zeros, taken[0]),) for _, taken in paired_by_rule(transfer))
    for step in (1, -1):
        near, far = (
            noise(evolve(filtered, arrangement=Arrangement(ours[::step], each)))
            for each in (theirs[::step], theirs[::-step])
        )
        assert near < 0.9 * far


@pytest.mark.parametrize(("name", "method"), [("elliptic 6", "bilinear"), ("band-pass 8", "zero-order-hold")])
def test_the_same_program_whatever_precision_was_asked_for_before(name: str, method: str) -> None:
    programs = []
    for bits in (64, 1024):
        found = arranged(sampled(MODELS[name], 20, method), Arithmetic(coefficient_bits=24), SIGNALS)
        assert found is not None
        found.sampled.sections(bits)
        programs.append(direct_program(found.sampled, Arithmetic(coefficient_bits=24), SIGNALS, "probe"))
    assert programs[0] == programs[1]


@pytest.mark.parametrize("name", ["low-pass 2", "integrator, lag", "integrator", "pi"])
def test_left_as_it_is(name: str) -> None:
    """A single section, and filters whose words have no norm."""
    assert arranged(sampled(MODELS[name], 20, "bilinear"), Arithmetic(), SIGNALS) is None


def test_without_a_norm_nothing_is_searched() -> None:
    filtered = sampled(MODELS["elliptic 6"], 20, "bilinear")
    assert arranged(filtered, Arithmetic(scaling="none"), SIGNALS) is None


def test_gains_beyond_doubles() -> None:
    """Nothing is chosen that can't be judged, and nothing is raised."""
    filtered = sampled(MODELS["elliptic 6"], 20, "bilinear")
    for gain in (fmpq(10) ** 600, fmpq(1, 10**600)):
        signals = Signals(Signal("V", fmpq(1)), Signal("V", gain))
        found = arranged(filtered, Arithmetic(), signals)
        assert found is None or found.noise < found.noise_by_rule
