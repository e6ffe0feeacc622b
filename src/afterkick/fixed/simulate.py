"""The bit-true interpreter of a Program: integer for integer what the emitted C does.

Up to a few stimuli run one by one in Python integers; more run side by side in numpy, where int64 suffices for every
valid program (see ``ranges``).
"""

from collections.abc import Callable, Sequence
from typing import Any

import numpy as np
from attrs import frozen
from numpy.typing import NDArray

from afterkick.errors import Problem, Refused
from afterkick.fixed.narrow import clamp, fit, shift_right
from afterkick.fixed.program import Program, Role, Sum
from afterkick.fixed.ranges import Analysis, Interval, analyse

__all__ = ["Trace", "preset_state", "simulate", "trace"]

FEW_STIMULI = 8
"""So many columns are still faster one by one."""

# A word's value: a Python integer, or an array with one entry a stimulus.
Values = list[Any]


@frozen(eq=False)
class Trace:
    """What a run leaves behind."""

    outputs: NDArray[np.int64]
    """Of the shape of the inputs."""
    state: dict[str, NDArray[np.int64]]
    """Each state word after the last sample; one entry a stimulus, or shape () for a single one."""
    overflows: dict[str, int]
    """How often each word's overflow rule acted, over all samples and stimuli; words that can't overflow are left out.
    """


def simulate(program: Program, inputs: NDArray[np.integer[Any]] | Sequence[int]) -> NDArray[np.int64]:
    """The output codes for input codes of shape (n,) or (n, m): n samples of m stimuli, each from a reset state.

    :raises Refused: for inputs that are not integers within the input word, or that contradict the program's proof.
    """
    return trace(program, inputs).outputs


def trace(
    program: Program,
    inputs: NDArray[np.integer[Any]] | Sequence[int],
    state: dict[str, int] | None = None,
) -> Trace:
    """As :func:`simulate`, with the final state and the overflow counts; starts from ``state``, zero where absent."""
    analysis = analyse(program)
    word = program.word(program.input)
    codes = _checked(inputs, analysis.proved.get(word.name, Interval.of_word(word.bits)))
    columns = codes[:, None] if codes.ndim == 1 else codes
    machine = _Machine(program, analysis)
    start = {name: int(value) for name, value in (state or {}).items()}
    if columns.shape[1] <= FEW_STIMULI:
        runs = [machine.run_one(column.tolist(), start) for column in columns.T]
        outputs = np.array([run[0] for run in runs], dtype=np.int64).reshape(columns.T.shape).T
        final = {name: np.array([run[1][name] for run in runs], dtype=np.int64) for name in machine.state_names}
    else:
        # An invalid program may exceed 64 bits: object arrays hold Python integers.
        outputs, final = machine.run_many(columns.astype(object if analysis.faults else np.int64), start)
    if codes.ndim == 1:
        final = {name: value[0] for name, value in final.items()}
    return Trace(np.ascontiguousarray(outputs.reshape(codes.shape)), final, machine.overflows())


def preset_state(program: Program, code: int, wanted: int) -> dict[str, int]:
    """The states that the program's preset gives for an input code and a wanted output code; the others are zero.

    :raises Refused: for a program without a preset, or codes that their words don't hold.
    """
    preset = program.preset
    if preset is None:
        raise Refused(Problem("program", "no preset", "a filter that integrates, in the parallel structure"))
    for name, value in ((program.input, code), (preset.wanted, wanted)):
        limits = Interval.of_word(program.word(program.input).bits)
        if not limits.lowest <= value <= limits.highest:
            raise Refused(Problem(name, str(value), f"{limits.lowest} to {limits.highest}", "clip the code"))
    words = {word.name: 0 for word in program.words if word.role is Role.STATE}
    given = {program.input: code, preset.wanted: wanted}
    for step in preset.steps:
        if isinstance(step, Sum):
            total = sum(term.factor * (given | words)[term.word] for term in step.terms)
            total = shift_right(total, step.right_shift, step.rounding)
            if step.limits is not None:
                total = clamp(total, step.limits)
            words[step.dest] = fit(total, program.word(step.dest).bits, step.overflow)
        else:
            words[step.dest] = (given | words)[step.source]
    return words


def _checked(inputs: NDArray[np.integer[Any]] | Sequence[int], limits: Interval) -> NDArray[np.int64]:
    codes = np.asarray(inputs)
    accepted = f"integers from {limits.lowest} to {limits.highest}, of shape (n,) or (n, m)"
    if codes.ndim not in (1, 2) or (codes.size and not np.issubdtype(codes.dtype, np.integer)):
        found = f"an array of shape {codes.shape} and type {codes.dtype}"
        raise Refused(Problem("inputs", found, accepted, "round the samples to input codes"))
    if codes.size and (codes.min() < limits.lowest or codes.max() > limits.highest):
        found = f"codes from {codes.min()} to {codes.max()}"
        raise Refused(Problem("inputs", found, accepted, "scale or clip the samples"))
    return codes.astype(np.int64)


class _Machine:
    """A program compiled into one closure a Sum; moves rebind list entries, nothing is copied."""

    def __init__(self, program: Program, analysis: Analysis) -> None:
        self.index = {word.name: i for i, word in enumerate(program.words)}
        self.state_names = [word.name for word in program.words if word.role is Role.STATE]
        self.input, self.output = self.index[program.input], self.index[program.output]
        self.counts = {name: 0 for name in self.index if name in analysis.may_overflow}
        self.limits = {word.name: Interval.of_word(word.bits) for word in program.words} | analysis.proved
        self.steps: list[Callable[[Values], None]] = []
        moves: list[tuple[int, int]] = []
        for step in program.steps:
            if isinstance(step, Sum):
                self._flush(moves)
                self.steps.append(self._sum(program, step, step.dest in analysis.may_overflow or bool(analysis.faults)))
                if step.dest in analysis.proved:
                    self.steps.append(self._keeps_proof(step.dest))
            else:
                moves.append((self.index[step.dest], self.index[step.source]))
        self._flush(moves)

    def _flush(self, moves: list[tuple[int, int]]) -> None:
        """Consecutive moves become one closure."""
        if moves:
            pairs = tuple(moves)
            moves.clear()

            def move(words: Values) -> None:
                for dest, source in pairs:
                    words[dest] = words[source]

            self.steps.append(move)

    def _sum(self, program: Program, step: Sum, may_overflow: bool) -> Callable[[Values], None]:
        factors = tuple((term.factor, self.index[term.word]) for term in step.terms)
        (first, first_word), rest = factors[0], factors[1:]
        dest, name = self.index[step.dest], step.dest
        residue = None if step.residue is None else self.index[step.residue]
        bits, right_shift, rounding, overflow, limits = (
            program.word(step.dest).bits,
            step.right_shift,
            step.rounding,
            step.overflow,
            step.limits,
        )
        counts = self.counts

        def add(words: Values) -> None:
            total = first * words[first_word]
            for factor, word in rest:
                total = total + factor * words[word]
            exact, total = total, shift_right(total, right_shift, rounding)
            if residue is not None:
                words[residue] = exact - (total << right_shift)
            if limits is not None:
                total = clamp(total, limits)
            if may_overflow:
                stored = fit(total, bits, overflow)
                changed = stored != total
                if changed is True or (changed is not False and changed.any()):
                    counts[name] = counts.get(name, 0) + int(np.count_nonzero(changed))
                total = stored
            words[dest] = total

        return add

    def _keeps_proof(self, name: str) -> Callable[[Values], None]:
        """A proved word has no overflow rule: where it leaves its range, the run ends."""
        index, limits = self.index[name], self.limits[name]

        def check(words: Values) -> None:
            outside = (words[index] < limits.lowest) | (words[index] > limits.highest)
            if outside is True or (outside is not False and outside.any()):
                found = f"{name} leaves the range from {limits.lowest} to {limits.highest} that was proved"
                remedy = "start from a reset, or run the program without the proof"
                raise Refused(Problem("program", found, "a run as the proof assumes it", remedy))

        return check

    def _start(self, zero: Any, state: dict[str, int]) -> Values:
        unknown = sorted(set(state) - set(self.state_names))
        if unknown:
            accepted = ", ".join(self.state_names) or "no state"
            raise Refused(Problem("state", f"the unknown words {', '.join(unknown)}", accepted))
        for name, value in state.items():
            limits = self.limits[name]
            if not limits.lowest <= value <= limits.highest:
                raise Refused(Problem("state", f"{name} = {value}", f"{limits.lowest} to {limits.highest}"))
        return [zero + state.get(name, 0) for name in self.index]

    def run_one(self, codes: list[int], state: dict[str, int]) -> tuple[list[int], dict[str, int]]:
        """One stimulus in Python integers."""
        words = self._start(0, state)
        outputs = []
        for code in codes:
            words[self.input] = code
            for step in self.steps:
                step(words)
            outputs.append(words[self.output])
        return outputs, {name: words[self.index[name]] for name in self.state_names}

    def run_many(self, codes: NDArray[Any], state: dict[str, int]) -> tuple[NDArray[np.int64], dict[str, Any]]:
        """Stimuli side by side."""
        words = self._start(np.zeros(codes.shape[1], dtype=codes.dtype), state)
        outputs = np.empty(codes.shape, dtype=np.int64)
        for n, row in enumerate(codes):
            words[self.input] = row
            for step in self.steps:
                step(words)
            outputs[n] = words[self.output]
        return outputs, {name: words[self.index[name]].astype(np.int64) for name in self.state_names}

    def overflows(self) -> dict[str, int]:
        """The counts so far."""
        return dict(self.counts)
