"""The exact partial fractions of a sampled filter: taps on its input, and sections of order 1 and 2 without b0.

A real pole gives a section of order 1, a pair of complex poles or a real double pole one of order 2; a pole at z = 0
gives one tap more.
"""

from typing import TYPE_CHECKING

from flint import arb

from afterkick.model.partial_fractions import Mode, modes_known
from afterkick.numbers import certified, is_exactly_zero
from afterkick.sampling.sections import Section

if TYPE_CHECKING:
    from afterkick.sampling.sampled import Sampled

__all__ = ["Parts"]

DOUBLE = 2


class Parts:
    """H = taps[0] + taps[1]/z + ... + the sum of the sections, evaluated to any accuracy that is asked for."""

    def __init__(self, sampled: "Sampled") -> None:
        self.sampled = sampled
        self.marginal = sampled.marginal
        self._known: dict[int, tuple[tuple[arb, ...], tuple[Section, ...]]] = {}

    @property
    def exist(self) -> bool:
        """Whether no pole is repeated beyond a real double one.

        A pair at a multiple of half the rate becomes a real double pole that is none of the model's: it has no parts.
        """
        if any(not pole.real and pole.value.imag.contains(0) for pole in self.sampled.transfer().poles):
            return False
        return all(len(mode.coefficients) <= (DOUBLE if mode.real else 1) for mode in self.sampled.pulse_modes())

    def taps(self, bits: int) -> tuple[arb, ...]:
        """The factors of the present input and of those before; an exact zero may be a ball that holds zero."""
        return self._computed(bits)[0]

    def sections(self, bits: int) -> tuple[Section, ...]:
        """In the order of the model's poles; what ``taps`` and ``sections`` give is known to 2^-bits and better."""
        return self._computed(bits)[1]

    def _computed(self, bits: int) -> tuple[tuple[arb, ...], tuple[Section, ...]]:
        if bits not in self._known:
            count = 1 + sum(is_exactly_zero(pole.value) for pole in self.sampled.transfer().poles)

            def compute() -> tuple[tuple[Mode, ...], tuple[arb, ...], tuple[Section, ...]]:
                modes = self.sampled.pulse_modes()
                sections = tuple(_section(mode) for mode in modes)
                return modes, _taps(self.sampled.first_samples(count), sections), sections

            found = certified(compute, lambda found: modes_known(found[0], bits), "the parts of the filter")
            self._known[bits] = found[1:]
        return self._known[bits]


def _section(mode: Mode) -> Section:
    """c_j C(n-1, j) p^(n-1-j), n >= 1, and for a complex pole its conjugate."""
    none, one = arb(0), arb(1)
    c, p = mode.coefficients, mode.pole
    if not mode.real:
        square = p.real * p.real + p.imag * p.imag
        return Section((none, 2 * c[0].real, -2 * (c[0] * p.conjugate()).real), (one, -2 * p.real, square))
    if len(c) == DOUBLE:
        return Section(
            (none, c[0].real, (c[1] - c[0] * p).real), (one, -2 * p.real, p.real * p.real), a_at_one=(1 - p.real) ** 2
        )
    return Section((none, c[0].real, none), (one, -p.real, none))


def _taps(first: list[arb], sections: tuple[Section, ...]) -> tuple[arb, ...]:
    """The first samples less what the sections give; nothing of theirs comes at n = 0."""
    left = list(first)
    for section in sections:
        (_, b1, b2), (_, a1, a2) = section.b, section.a
        past = [arb(0), arb(0)]
        for n in range(1, len(first)):
            value = (b1 if n == 1 else b2 if n == 2 else arb(0)) - a1 * past[-1] - a2 * past[-2]
            left[n] -= value
            past.append(value)
    return tuple(left)
