"""The worst case of every word of a Program, for every input within the promised peak: rigorous, from linear responses.

While no word has overflowed, each word is the exact linear response to the input plus the responses to the roundings,
whose sizes are known.  If the sum of the worst of all of these fits every word, no word ever overflows; so the ranges
hold for ever, by induction over the samples.

A state that integrates has no such bound: a clamp holds it.  The other words are bounded with it as one more input,
anywhere within the clamp's limits.
"""

from functools import cached_property
from math import ceil, floor, inf, sqrt

import numpy as np
from attrs import evolve, frozen

from afterkick.fixed.linear import LinearSystem, RationalResponse, RoundingSource
from afterkick.fixed.modal_sums import AbsoluteSum, absolute_sum, modal_response
from afterkick.fixed.program import Program, Proof, ProvedRange, Sum, dependencies
from afterkick.fixed.ranges import analyse
from afterkick.numbers import fraction

__all__ = ["SumRange", "WordRange", "WorstCase", "rounded_down", "rounded_up"]


@frozen
class WordRange:
    """What a computed word can hold, in its own last places; both limits are bounds."""

    word: str
    lowest: float
    highest: float
    from_input: float
    """Of the magnitude, the input's part."""
    from_rounding: float
    capacity_low: int
    capacity_high: int
    clamped: bool = False
    """Whether it is a clamp that holds the range."""

    @property
    def filling(self) -> float:
        """The part of the word that the range takes, at most 1 where it fits."""
        return max(self.highest / self.capacity_high, self.lowest / self.capacity_low)

    @property
    def fits(self) -> bool:
        """Whether the word never overflows, if no other does."""
        return self.capacity_low <= self.lowest and self.highest <= self.capacity_high


@frozen
class SumRange:
    """How far a sum gets on the way, in any order of its terms, the rounding included."""

    word: str
    """That it writes."""
    partial_sum: int
    """No partial sum is larger in magnitude, while the words stay within their ranges."""
    accumulator_bits: int

    @property
    def bits(self) -> int:
        """That it takes, the sign included; no program is built that has fewer."""
        return self.partial_sum.bit_length() + 1

    @property
    def filling(self) -> float:
        """The part of the accumulator that is taken; at most 1."""
        return self.partial_sum / ((1 << (self.accumulator_bits - 1)) - 1)


@frozen(eq=False)
class WorstCase:
    """The linear responses of a program and the ranges they allow, as long as no word overflows."""

    program: Program

    @cached_property
    def peak_code(self) -> int:
        """The promised peak in codes, rounded up; full scale is the code -2^(bits-1)."""
        program = self.program
        scale = 1 << (program.data_bits - 1)
        return min(ceil(fraction(program.input_format.peak / program.input_format.full_scale * scale)), scale)

    @cached_property
    def held(self) -> dict[str, tuple[int, int]]:
        """The words that integrate and that a clamp holds, with its limits."""
        return {
            step.dest: step.limits
            for step in self.program.steps
            if isinstance(step, Sum)
            and step.limits is not None
            and step.dest in dependencies(self.program, (term.word for term in step.terms))
        }

    @cached_property
    def may_overflow(self) -> frozenset[str]:
        """The words that interval arithmetic does not keep from overflowing."""
        return analyse(self.program).may_overflow

    @cached_property
    def system(self) -> LinearSystem:
        """The exact linear system, cut at the words that are held."""
        return LinearSystem(self.program, frozenset(self.held))

    @cached_property
    def closed(self) -> LinearSystem:
        """The same without any cut."""
        return LinearSystem(self.program) if self.held else self.system

    @cached_property
    def to_input(self) -> dict[str, RationalResponse]:
        """Each computed word's response to the input."""
        return self.system.responses(None)

    @cached_property
    def to_rounding(self) -> dict[RoundingSource, dict[str, RationalResponse]]:
        """Each computed word's response to each rounding."""
        return {source: self.system.responses(source.dest) for source in self.system.sources}

    @cached_property
    def closed_to_input(self) -> dict[str, RationalResponse]:
        """As ``to_input``, without any cut."""
        return self.closed.responses(None) if self.held else self.to_input

    @cached_property
    def closed_to_rounding(self) -> dict[RoundingSource, dict[str, RationalResponse]]:
        """As ``to_rounding``, without any cut."""
        if not self.held:
            return self.to_rounding
        return {source: self.closed.responses(source.dest) for source in self.closed.sources}

    @cached_property
    def ranges(self) -> tuple[WordRange, ...]:
        """Of every computed word."""
        return tuple(self._range(name) for name in self.system.computed)

    @cached_property
    def sums(self) -> tuple[SumRange, ...]:
        """Of every computed word."""
        steps = [step for step in self.program.steps if isinstance(step, Sum)]
        fitting = self.ranges if all(word.fits for word in self.ranges) else ()
        # the 0 of a reset is among what a word holds, whatever its clamp says
        listed = (ProvedRange(word.word, min(ceil(word.lowest), 0), max(floor(word.highest), 0)) for word in fitting)
        program = evolve(self.program, proof=Proof(self.peak_code, tuple(listed))) if fitting else self.program
        reached = analyse(program).partial_sums
        return tuple(SumRange(step.dest, reached[step.dest], step.accumulator_bits) for step in steps)

    @cached_property
    def noise_rms(self) -> float | None:
        """Estimate, of the output: white, uniformly distributed, independent rounding errors."""
        to_output = (responses[self.program.output] for responses in self.closed_to_rounding.values())
        variance = sum(self._sum(response).squares for response in to_output)
        return None if variance == inf else sqrt(variance / 12)

    @cached_property
    def rounding_span(self) -> tuple[float, float]:
        """The least and the most that all roundings together add to the output."""
        up, down = self.from_rounding(self.program.output)
        return -down, up

    @cached_property
    def to_held(self) -> dict[str, dict[str, RationalResponse]]:
        """Each computed word's response to each word that is held."""
        return {name: self.system.responses(name) for name in self.held}

    def _range(self, name: str) -> WordRange:
        word = self.program.word(name)
        if name in self.held:
            low, high = self.held[name]
            return WordRange(name, low, high, 0.0, 0.0, word.lowest, word.highest, clamped=True)
        reach = rounded_up(self.peak_code * self._sum(self.to_input[name]).upper)
        for source, responses in self.to_held.items():
            reach = rounded_up(reach + rounded_up(max(map(abs, self.held[source])) * self._sum(responses[name]).upper))
        up, down = self.from_rounding(name)
        lowest, highest = rounded_down(-reach - down), rounded_up(reach + up)
        if name not in self.may_overflow:
            # no state and no input code can take it beyond: what the sum of the worst cases says more is its slack
            lowest, highest = max(lowest, float(word.lowest)), min(highest, float(word.highest))
        limits = next((s.limits for s in self.program.steps if isinstance(s, Sum) and s.dest == name), None)
        clamped = limits is not None and not (limits[0] <= lowest and highest <= limits[1])
        if limits is not None and clamped:
            lowest, highest = max(lowest, limits[0]), min(highest, limits[1])
        return WordRange(name, lowest, highest, reach, max(up, down), word.lowest, word.highest, clamped)

    def from_rounding(self, name: str) -> tuple[float, float]:
        """How far up and down all roundings take a word at most."""
        up = down = 0.0
        for source, responses in self.to_rounding.items():
            response = responses[name]
            if response.numerator.is_zero():
                continue
            size = float(fraction(source.radius)) * self._sum(response).upper
            total = response.total
            shift = 0.0 if total is None else float(fraction(source.mean * total))
            # the two may cancel: what their conversions and products rounded is far below this part of either
            slack = (size + abs(shift)) * 2.0**-48
            up = rounded_up(up + rounded_up(size + shift + slack))
            down = rounded_up(down + rounded_up(size - shift + slack))
        return up, down

    @cached_property
    def _sums(self) -> dict[RationalResponse, AbsoluteSum]:
        return {}

    def _sum(self, response: RationalResponse) -> AbsoluteSum:
        if response not in self._sums:
            self._sums[response] = absolute_sum(modal_response(response))
        return self._sums[response]


def rounded_up(value: float) -> float:
    """Above what the last operation would have given exactly."""
    return float(np.nextafter(np.nextafter(value, inf), inf))


def rounded_down(value: float) -> float:
    """Below it."""
    return -rounded_up(-value)
