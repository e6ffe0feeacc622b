"""The interpreter of a FloatProgram: bit for bit what the emitted C does where nothing is fused or held wider.

numpy's single-precision products and sums are those of IEEE 754, subnormals included.
"""

from collections.abc import Callable, Iterator
from typing import Any

import numpy as np
from attrs import frozen
from numpy.typing import ArrayLike, NDArray

from afterkick.errors import Problem, Refused
from afterkick.fixed.program import Move
from afterkick.floating.program import FloatFlush, FloatProduct, FloatProgram, FloatSum

__all__ = ["FloatTrace", "float_states", "float_trace", "simulate_float"]

# A word's value: one numpy scalar, or an array with one entry a stimulus.
Values = list[Any]


@frozen(eq=False)
class FloatTrace:
    """What a run leaves behind."""

    outputs: NDArray[Any]
    """Of the shape of the inputs."""
    state: dict[str, Any]
    """Each state word after the last sample; one entry a stimulus, or a scalar for a single one."""


def simulate_float(program: FloatProgram, inputs: ArrayLike) -> NDArray[np.float32]:
    """The outputs, in output units, for inputs of shape (n,) or (n, m) in input units: n samples of m stimuli, each
    from a reset state.  Inputs are first rounded to singles.

    :raises Refused: for inputs that are not finite singles.
    """
    return float_trace(program, inputs).outputs


def float_trace(
    program: FloatProgram,
    inputs: ArrayLike,
    state: dict[str, Any] | None = None,
    *,
    precision: type[np.float32] | type[np.float64] = np.float32,
) -> FloatTrace:
    """As :func:`simulate_float`, with the final state; starts from ``state``, zero where absent.

    With ``precision`` np.float64 the same steps with the same coefficients in doubles, nothing flushed: what the
    roundings of single precision are measured against.
    """
    samples = _checked(inputs).astype(precision)
    machine = _Machine(program, precision)
    outputs = []
    with np.errstate(all="ignore"):
        words = machine.start(samples, state or {})
        for _ in machine.run(words, samples):
            outputs.append(words[machine.output])
    final = {name: words[machine.index[name]] for name in program.states}
    return FloatTrace(np.array(outputs, dtype=precision).reshape(samples.shape), final)


def float_states(program: FloatProgram, inputs: ArrayLike) -> NDArray[np.float32]:
    """All state words after each sample of one stimulus of shape (n,), from a reset state: shape (n, states)."""
    samples = _checked(inputs)
    machine = _Machine(program, np.float32)
    places = [machine.index[name] for name in program.states]
    with np.errstate(all="ignore"):
        words = machine.start(samples, {})
        rows = [[words[place] for place in places] for _ in machine.run(words, samples)]
    return np.array(rows, dtype=np.float32).reshape(samples.size, len(places))


def _checked(inputs: ArrayLike) -> NDArray[np.float32]:
    samples = np.asarray(inputs)
    accepted = "finite numbers in the range of singles, of shape (n,) or (n, m)"
    if samples.ndim not in (1, 2) or (samples.size and samples.dtype.kind not in "fiu"):
        found = f"an array of shape {samples.shape} and type {samples.dtype}"
        raise Refused(Problem("inputs", found, accepted, "give real samples in input units"))
    with np.errstate(over="ignore"):
        singles = samples.astype(np.float32)
    if not np.isfinite(singles).all():
        raise Refused(Problem("inputs", "a value that is no finite single", accepted, "remove or clip it"))
    return singles


class _Machine:
    """A program compiled into one closure a step; moves rebind list entries, nothing is copied."""

    def __init__(self, program: FloatProgram, precision: type[np.float32] | type[np.float64]) -> None:
        self.precision = precision
        self.states = program.states
        self.index = {word.name: i for i, word in enumerate(program.words)}
        self.input, self.output = self.index[program.input], self.index[program.output]
        self.steps: list[Callable[[Values], None]] = []
        for step in program.steps:
            if isinstance(step, FloatFlush):
                if precision is np.float32:
                    self.steps.append(_flush([self.index[state] for state in step.states], np.float32(step.threshold)))
                continue
            dest = self.index.setdefault(step.dest, len(self.index))
            if isinstance(step, FloatProduct):
                self.steps.append(_product(dest, precision(step.factor), self.index[step.word]))
            elif isinstance(step, FloatSum):
                self.steps.append(self._sum(dest, step))
            else:
                self.steps.append(_move(dest, step, self.index))

    def _sum(self, dest: int, step: FloatSum) -> Callable[[Values], None]:
        (first_sign, first), *rest = [(sign, self.index[word]) for sign, word in step.terms]

        def add(words: Values) -> None:
            total = words[first] if first_sign > 0 else -words[first]
            for sign, word in rest:
                total = total + words[word] if sign > 0 else total - words[word]
            words[dest] = total

        return add

    def start(self, samples: NDArray[Any], state: dict[str, Any]) -> Values:
        """The words before the first sample."""
        unknown = sorted(set(state) - set(self.states))
        if unknown:
            accepted = ", ".join(self.states) or "no state"
            raise Refused(Problem("state", f"the unknown words {', '.join(unknown)}", accepted))
        # [()] makes a scalar of an array without axes: several times as fast as an array of one entry
        zero = np.zeros(samples.shape[1:], self.precision)[()]
        return [zero + self.precision(state.get(name, 0)) for name in self.index]

    def run(self, words: Values, samples: NDArray[Any]) -> Iterator[None]:
        """Takes one sample at each turn."""
        for row in samples:
            words[self.input] = row
            for step in self.steps:
                step(words)
            yield


def _product(dest: int, factor: Any, word: int) -> Callable[[Values], None]:
    def multiply(words: Values) -> None:
        words[dest] = factor * words[word]

    return multiply


def _flush(states: list[int], threshold: np.float32) -> Callable[[Values], None]:
    def flush(words: Values) -> None:
        small = np.all([abs(words[state]) < threshold for state in states], axis=0)
        for state in states:
            words[state] = np.where(small, np.float32(0), words[state])[()]

    return flush


def _move(dest: int, step: Move, index: dict[str, int]) -> Callable[[Values], None]:
    source = index[step.source]

    def move(words: Values) -> None:
        words[dest] = words[source]

    return move
