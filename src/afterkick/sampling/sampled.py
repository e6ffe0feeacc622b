"""The sampled filter: exact in z, evaluated to any accuracy that is asked for."""

from collections import Counter
from collections.abc import Callable, Sequence
from functools import cached_property, lru_cache
from math import comb

from attrs import field, frozen
from flint import acb, arb, fmpq

from afterkick.design.schema import Sampling
from afterkick.model.model import Model
from afterkick.model.partial_fractions import Mode, expand, product_taylor
from afterkick.numbers import accurate, certified, is_exactly_zero
from afterkick.sampling.pulse_transfer import PulseTransfer, ZRoot, expanded
from afterkick.sampling.sections import Arrangement, Section, paired

__all__ = ["Arrangement", "ParallelSection", "Sampled", "Section"]

Attempt = Callable[[], PulseTransfer | None]


@frozen
class ParallelSection:
    """(b[0] + b[1]/z) / (1 + a[1]/z + a[2]/z^2), one term of a sum."""

    b: tuple[arb, arb]
    a: tuple[arb, arb, arb]


# Compared by identity: a Sampled is a description whose numbers are computed when asked for, and cached by what they
# are computed from.
@frozen(eq=False)
class Sampled:
    """z^-delay_samples times a pulse transfer function of ``order`` poles."""

    model: Model
    options: Sampling
    delay_samples: int
    """Whole samples of dead time."""
    fraction_s: fmpq
    """What the whole samples leave of the dead time."""
    attempt: Attempt = field(repr=False)
    """The factored pulse transfer function at the present working precision; None: more bits needed."""
    warnings: tuple[str, ...] = ()
    arrangement: Arrangement | None = None
    """Of the sections; None: by the rule of :mod:`afterkick.sampling.sections`."""

    @property
    def rate_hz(self) -> fmpq:
        """Samples per second."""
        return self.options.rate_hz

    @property
    def method(self) -> str:
        """The sampling method's name."""
        return self.options.method

    @property
    def period_s(self) -> fmpq:
        """T."""
        return 1 / self.options.rate_hz

    def transfer(self, bits: int = 128) -> PulseTransfer:
        """The factored pulse transfer function, with balls of at least ``bits`` working bits."""
        return _transfer(self.attempt, bits)

    def sections(self, bits: int) -> tuple[Section, ...]:
        """The cascade: each coefficient exact or within 2^-bits of the largest of its group, 1+a1+a2 within 2^-bits of
        itself, for bits up to 2000: a numerator value that 2048 bits can't tell from zero is taken as zero."""
        return _sections(self.attempt, self.arrangement, bits)

    @cached_property
    def marginal(self) -> bool:
        """Whether a pole of the sampled filter is exactly on the unit circle."""
        return any(
            pole.on_circle or pole.at_one() or (pole.real and pole.value.is_exact() and pole.value.real == -1)
            for pole in self.transfer().poles
        )

    @cached_property
    def stable(self) -> bool:
        """Whether every pole is strictly inside the unit circle."""

        def magnitudes() -> list[arb]:
            return [abs(pole.value) - 1 for pole in _compute(self.attempt).poles] if not self.marginal else []

        found = certified(
            magnitudes, lambda values: all(bool(v < 0) or bool(v > 0) for v in values), "the radius of a sampled pole"
        )
        return not self.marginal and all(v < 0 for v in found)

    def pulse_modes(self, integrations: int = 0) -> tuple[Mode, ...]:
        """c_j of g[n] = sum over j of c_j C(n-1, j) p^(n-1-j), n > number of poles at z = 0, at the working precision.

        With ``integrations`` = 1 the step response instead.  The whole-sample delay is not included.
        """
        transfer = _compute(self.attempt)
        zeros = list(transfer.zeros)
        times = Counter(pole.name for pole in transfer.poles if not is_exactly_zero(pole.value))
        named = {pole.name: pole for pole in transfer.poles if pole.name in times}
        for _ in range(integrations):
            one = next((zero for zero in zeros if zero.at_one()), None)
            if one is None:
                name = next((pole.name for pole in named.values() if pole.at_one()), "step")
                named.setdefault(name, ZRoot(acb(1), True, name=name))
                times[name] += 1
            else:
                zeros.remove(one)
        factors = [(root.value, 1) for root in zeros]
        factors += [(root.value.conjugate(), 1) for root in zeros if not root.real]
        poles = [(pole.value, pole.real, times[name]) for name, pole in named.items()]
        # in powers of z, what the numerator lacks in degree is zeros at z = 0; more zeros than poles are poles there
        surplus = sum(pole.degree * times[name] for name, pole in named.items()) - len(factors) - transfer.leading
        if surplus > 0:
            factors.append((acb(0), surplus))
        elif surplus < 0:
            poles.append((acb(0), True, -surplus))
        return expand(product_taylor(transfer.gain, factors), poles)[: len(named)]

    def first_samples(self, number: int) -> list[arb]:
        """g[0] .. g[number-1] by series division, without the whole-sample delay."""
        transfer = _compute(self.attempt)
        numerator = [arb(0)] * transfer.leading + expanded(transfer.zeros)
        denominator = expanded(transfer.poles)
        samples: list[arb] = []
        for n in range(number):
            value = transfer.gain * numerator[n] if n < len(numerator) else arb(0)
            for j in range(1, min(n, len(denominator) - 1) + 1):
                value -= denominator[j] * samples[n - j]
            samples.append(value)
        return samples

    def pulse(self, indices: Sequence[int]) -> list[arb]:
        """g[n] at rising indices n, without the whole-sample delay, at the working precision."""
        early = 1 + sum(is_exactly_zero(pole.value) for pole in self.transfer().poles)
        first = self.first_samples(early)
        late = [n for n in indices if n >= early]
        values = [first[n] for n in indices if n < early] + [arb(0)] * len(late)
        for mode in self.pulse_modes():
            weights = [c / mode.pole**j for j, c in enumerate(mode.coefficients)]
            power, at = acb(1), 1
            stride, advance = 0, acb(1)
            for place, n in enumerate(late, len(values) - len(late)):
                if n - at != stride:
                    stride, advance = n - at, mode.pole ** (n - at)
                power *= advance
                at = n
                value = weights[0]
                for j, weight in enumerate(weights[1:], 1):
                    value += weight * comb(n - 1, j)
                values[place] += (value * power).real if mode.real else 2 * (value * power).real
        return values

    def parallel(self, bits: int) -> tuple[arb, tuple[ParallelSection, ...]] | None:
        """The direct part and first-order-numerator terms of the sum form; None for repeated poles, which a pair at a
        multiple of half the rate becomes too, or poles at 0."""
        if any(times > 1 for times in self.model.poles.values()) or any(
            is_exactly_zero(pole.value) or (not pole.real and pole.value.imag.contains(0))
            for pole in self.transfer().poles
        ):
            return None

        def compute() -> tuple[arb, tuple[ParallelSection, ...]]:
            modes = self.pulse_modes()
            direct = self.first_samples(1)[0]
            for mode in modes:
                residue = (mode.coefficients[0] / mode.pole).real
                direct -= residue if mode.real else 2 * residue
            return direct, tuple(_parallel_section(mode) for mode in modes)

        def enough(found: tuple[arb, tuple[ParallelSection, ...]]) -> bool:
            return all(_within(section.b, bits) and _within(section.a, bits) for section in found[1])

        return certified(compute, enough, "the sum form of the sampled filter")


def _parallel_section(mode: Mode) -> ParallelSection:
    # c p^(n-1) for n >= 1 is c/p * p^n less its value at n = 0, which the direct part takes up
    residue, pole = mode.coefficients[0] / mode.pole, mode.pole
    if mode.real:
        return ParallelSection((residue.real, arb(0)), (arb(1), -pole.real, arb(0)))
    square = pole.real * pole.real + pole.imag * pole.imag
    return ParallelSection((2 * residue.real, -2 * (residue * pole.conjugate()).real), (arb(1), -2 * pole.real, square))


def _compute(attempt: Attempt) -> PulseTransfer:
    """The transfer at the present working precision or the lowest one above it that isolates the zeros."""
    found = certified(
        attempt,
        lambda found: found is not None,
        "the zeros of the sampled filter (a mode very much faster than the rate may be why: leave it out, or take "
        "bilinear or matched)",
    )
    assert found is not None
    return found


@lru_cache(maxsize=64)
def _transfer(attempt: Attempt, bits: int) -> PulseTransfer:
    def compute() -> PulseTransfer:
        return _compute(attempt)

    def enough(transfer: PulseTransfer) -> bool:
        return all(accurate(root.value, bits // 2) for root in transfer.poles) and accurate(transfer.gain, bits // 2)

    return certified(compute, enough, "the sampled filter")


@lru_cache(maxsize=256)
def _sections(attempt: Attempt, arrangement: Arrangement | None, bits: int) -> tuple[Section, ...]:
    def compute() -> tuple[Section, ...] | None:
        transfer = attempt()
        return None if transfer is None else paired(transfer, arrangement)

    def enough(sections: tuple[Section, ...] | None) -> bool:
        return sections is not None and all(
            _within(s.b, bits) and _within(s.a, bits) and accurate(s.a_at_one, bits) for s in sections
        )

    found = certified(compute, enough, "the sections of the sampled filter")
    assert found is not None
    return found


def _within(group: tuple[arb, ...], bits: int) -> bool:
    """Whether every radius is at most 2^-bits of the largest coefficient."""
    largest = arb(0)
    for value in group:
        largest = largest.max(abs(value).lower())
    return all(bool(value.rad() <= largest * arb(2) ** -bits) for value in group)
