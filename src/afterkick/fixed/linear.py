"""A Program as an exact linear system: what the input and each rounding do to each word.

Every Sum is the exact linear form of its terms plus a rounding error within known limits, as long as nothing overflows;
its residue, if it is kept, is that error with the opposite sign, at the scale of the sum; a Move is itself.  All
coefficients are rational, so the responses and their transfer functions are too.

A word that a clamp holds may be cut off from its sum: it is then one more source, of values within the clamp's limits,
and what is proved of the others holds whatever the clamp does.
"""

from functools import cached_property

from attrs import frozen
from flint import fmpq, fmpq_poly

from afterkick.fixed.narrow import residue_limits
from afterkick.fixed.program import Move, Program, Role, Sum

__all__ = ["LinearSystem", "RationalResponse", "RoundingSource"]


@frozen
class RoundingSource:
    """The rounding of one Sum: an error of ``low`` to ``high`` last places of the word ``dest``."""

    dest: str
    low: fmpq
    high: fmpq

    @property
    def mean(self) -> fmpq:
        """The middle of the interval."""
        return (self.low + self.high) / 2

    @property
    def radius(self) -> fmpq:
        """Half its width."""
        return (self.high - self.low) / 2


@frozen(eq=False)
class RationalResponse:
    """A pulse response N(1/z) / D(1/z) in lowest terms, D(0) = 1: exact."""

    numerator: fmpq_poly
    denominator: fmpq_poly

    @property
    def total(self) -> fmpq | None:
        """The sum of all samples; None with a pole at z = 1."""
        bottom = self.denominator(fmpq(1))
        return None if bottom == 0 else self.numerator(fmpq(1)) / bottom

    def samples(self, number: int) -> list[fmpq]:
        """The first samples, by series division."""
        top, bottom = self.numerator.coeffs(), self.denominator.coeffs()
        values: list[fmpq] = []
        for n in range(number):
            value = top[n] if n < len(top) else fmpq(0)
            for j in range(1, min(n, len(bottom) - 1) + 1):
                value -= bottom[j] * values[n - j]
            values.append(value)
        return values


@frozen(eq=False)
class LinearSystem:
    """The responses of a program's words, in last places of each word per unit of the source."""

    program: Program
    cut: frozenset[str] = frozenset()
    """Words that are cut off from their sums."""

    @cached_property
    def sources(self) -> tuple[RoundingSource, ...]:
        """One for each Sum that rounds, of words that are not cut off."""
        return tuple(
            RoundingSource(step.dest, *_rounding_limits(step))
            for step in self.program.steps
            if isinstance(step, Sum) and step.right_shift > 0 and step.dest not in self.cut
        )

    @cached_property
    def computed(self) -> tuple[str, ...]:
        """The words that Sums write, in order; every other word is the input or a delayed copy of one."""
        return tuple(step.dest for step in self.program.steps if isinstance(step, Sum))

    @cached_property
    def states(self) -> tuple[str, ...]:
        """The state words."""
        return tuple(word.name for word in self.program.words if word.role is Role.STATE)

    @cached_property
    def denominator(self) -> fmpq_poly:
        """In 1/z: the product over the sections."""
        product = fmpq_poly([1])
        for section in self.program.sections:
            product *= fmpq_poly([fmpq(value, section.a[0]) for value in section.a])
        return product

    def responses(self, source: str | None) -> dict[str, RationalResponse]:
        """Of every computed word to a unit input sample (None), or to one last place added to the Sum of ``source``.

        Of a word that is cut off, to one last place in that word.
        """
        order = self.denominator.degree()
        # The common recurrence is checked over as many samples as the system has states: it then holds for ever.
        length = order + 2 * len(self.states) + 4
        histories = self._pulse(source, length)
        bottom = self.denominator
        found = {}
        for name, samples in histories.items():
            convolved = (fmpq_poly(samples) * bottom).truncate(length).coeffs()
            numerator = fmpq_poly(convolved)
            if numerator.degree() >= length - len(self.states):
                raise AssertionError(f"the word {name} does not follow the recurrence of its sections")
            shared = numerator.gcd(bottom)
            top, reduced = numerator // shared, bottom // shared
            found[name] = RationalResponse(top / reduced[0], reduced / reduced[0])
        return found

    def _pulse(self, source: str | None, length: int) -> dict[str, list[fmpq]]:
        words = {word.name: fmpq(0) for word in self.program.words}
        histories: dict[str, list[fmpq]] = {name: [] for name in self.computed}
        steps = list(self.program.steps)
        for n in range(length):
            words[self.program.input] = fmpq(1 if n == 0 and source is None else 0)
            for step in steps:
                if isinstance(step, Move):
                    words[step.dest] = words[step.source]
                    continue
                total = sum((term.factor * words[term.word] for term in step.terms), fmpq(0))
                total /= fmpq(2) ** step.right_shift
                error = 1 if n == 0 and step.dest == source else 0
                if step.residue is not None:
                    words[step.residue] = fmpq(-error << step.right_shift)
                total = fmpq(error) if step.dest in self.cut else total + error
                words[step.dest] = total
                histories[step.dest].append(total)
        return histories


def _rounding_limits(step: Sum) -> tuple[fmpq, fmpq]:
    """Of stored less exact, in last places: the opposite of what is dropped."""
    lowest, highest = residue_limits(step.right_shift, step.rounding)
    return fmpq(-highest, 1 << step.right_shift), fmpq(-lowest, 1 << step.right_shift)
