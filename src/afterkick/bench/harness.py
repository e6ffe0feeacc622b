"""The C that the bench adds to what was emitted: a loop of single calls, and where the filter keeps its memory."""

from typing import TYPE_CHECKING, Any

import numpy as np
from attrs import frozen

from afterkick.emit.literals import container_bits
from afterkick.emit.symbols import Symbols
from afterkick.fixed.program import Program, Role

if TYPE_CHECKING:
    from afterkick.floating import FloatProgram

__all__ = ["Harness", "StateMember", "sample_type"]

_SOURCE = """\
#include "{prefix}.h"
#include <stddef.h>

extern const uint32_t {layout}[];
const uint32_t {layout}[] = {{
    (uint32_t)sizeof({prefix}_state){offsets}
}};

void {steps}({prefix}_state *state, const {sample} *input, {sample} *output, uint32_t count);
void {steps}({prefix}_state *state, const {sample} *input, {sample} *output, uint32_t count)
{{
    uint32_t i;

    for (i = 0; i < count; ++i) {{
        output[i] = {prefix}_step(state, input[i]);
    }}
}}
"""


@frozen
class StateMember:
    """A state word as a member of the struct."""

    word: str
    symbol: str
    type: np.dtype[Any]


@frozen
class Harness:
    """What the bench needs to know of one design's C, beside the emitted files."""

    prefix: str
    sample: np.dtype[Any]
    """Of inputs and outputs."""
    members: tuple[StateMember, ...]

    @classmethod
    def of(cls, program: "Program | FloatProgram") -> "Harness":
        """For the files that ``emit_c`` makes of the program."""
        symbols = Symbols.of(program.name)
        states = [word for word in program.words if word.role is Role.STATE]
        if isinstance(program, Program):
            bits = {word.name: word.bits for word in program.words}
            types = [np.dtype(f"<i{container_bits(bits[word.name]) // 8}") for word in states]
        else:
            types = [np.dtype("<f4")] * len(states)
        members = (
            StateMember(word.name, symbols.local(word.name), kind) for word, kind in zip(states, types, strict=True)
        )
        return cls(program.name, sample_type(program), tuple(members))

    @property
    def layout_symbol(self) -> str:
        """The table: the size of the struct, then the offset of each member."""
        return f"{self.prefix}_bench_layout"

    @property
    def steps_symbol(self) -> str:
        """The loop of single calls."""
        return f"{self.prefix}_bench_steps"

    @property
    def file(self) -> str:
        """The name of the source."""
        return f"{self.prefix}_bench.c"

    @property
    def source(self) -> str:
        """C99."""
        offsets = "".join(f",\n    (uint32_t)offsetof({self.prefix}_state, {member.symbol})" for member in self.members)
        sample = "float" if self.sample.kind == "f" else f"int{8 * self.sample.itemsize}_t"
        return _SOURCE.format(
            prefix=self.prefix, layout=self.layout_symbol, steps=self.steps_symbol, sample=sample, offsets=offsets
        )

    def state(self, memory: bytes, offsets: tuple[int, ...]) -> dict[str, Any]:
        """Each word in the memory of a struct, as a numpy scalar."""
        return {
            member.word: np.frombuffer(memory, member.type, count=1, offset=offset)[0]
            for member, offset in zip(self.members, offsets, strict=True)
        }


def sample_type(program: "Program | FloatProgram") -> np.dtype[Any]:
    """Of the inputs and outputs of the emitted functions, in little-endian order."""
    if isinstance(program, Program):
        return np.dtype(f"<i{container_bits(program.word(program.input).bits) // 8}")
    return np.dtype("<f4")
