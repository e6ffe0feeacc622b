"""Compile emitted C for the machine this runs on and run it: the first judge of whether C and simulator agree.

The code is built as a shared library without the C library: what the emitted C needs is in it.
"""

import ctypes
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from tempfile import TemporaryDirectory
from typing import TYPE_CHECKING, Any

import numpy as np
from attrs import frozen
from numpy.typing import ArrayLike, NDArray

from afterkick.bench.compilers import call_compiler, find_compiler, is_wheel, shown
from afterkick.bench.harness import sample_type
from afterkick.fixed.program import Program, Role

if TYPE_CHECKING:
    from afterkick.floating import FloatProgram

__all__ = ["CompiledFilter", "HostRun", "compile_on_host", "run_on_host"]

# Contracted, a product and a sum of singles round once instead of twice.
FLAGS = ("-std=c99", "-O2", "-ffp-contract=off", "-shared", "-fPIC", "-nostdlib")
ZIG_FLAGS = ("-fno-sanitize=all",)
LARGEST_STATE_WORD = 8
"""Bytes of the widest state word: an upper bound for each member of the struct."""


@frozen
class HostRun:
    """What the compiled code did."""

    outputs: NDArray[Any]
    """Output codes as 64-bit integers, or singles, of the shape of the inputs."""
    selftest: int
    """What NAME_selftest returned: -1 where it holds."""
    compiler: str


class CompiledFilter:
    """The functions of one design in a loaded library; its samples are codes or singles."""

    def __init__(self, library: ctypes.CDLL, program: "Program | FloatProgram", compiler: str) -> None:
        self.library, self.compiler = library, compiler
        self._array_type, self._answer_type = _sample_types(program)
        sample: Any = np.ctypeslib.as_ctypes_type(self._array_type)
        words = sum(word.role is Role.STATE for word in program.words)
        self._state = ctypes.create_string_buffer(LARGEST_STATE_WORD * (words + 1))
        self._reset, self._step, self._run, self._selftest = (
            getattr(library, f"{program.name}_{what}") for what in ("reset", "step", "run", "selftest")
        )
        self._reset.argtypes, self._reset.restype = [ctypes.c_void_p], None
        self._step.argtypes, self._step.restype = [ctypes.c_void_p, sample], sample
        self._run.argtypes, self._run.restype = [ctypes.c_void_p] * 3 + [ctypes.c_uint32], None
        self._selftest.argtypes, self._selftest.restype = [], ctypes.c_int32

    def reset(self) -> None:
        """NAME_reset."""
        self._reset(self._state)

    def step(self, sample: float) -> int | float:
        """NAME_step."""
        answer: int | float = self._step(self._state, sample)
        return answer

    def run(self, samples: NDArray[Any]) -> NDArray[Any]:
        """NAME_run over an array of shape (n,), in place in a copy."""
        block = np.array(samples, dtype=self._array_type, order="C")
        self._run(self._state, block.ctypes.data, block.ctypes.data, block.size)
        return block.astype(self._answer_type)

    def selftest(self) -> int:
        """NAME_selftest."""
        return int(self._selftest())


def _sample_types(program: "Program | FloatProgram") -> tuple[np.dtype[Any], np.dtype[Any]]:
    """Of the compiled functions, and of the arrays that they are compared in."""
    if isinstance(program, Program):
        return sample_type(program), np.dtype(np.int64)
    return sample_type(program), np.dtype(np.float32)


@contextmanager
def compile_on_host(
    files: dict[str, str], program: "Program | FloatProgram", command: tuple[str, ...] | None = None
) -> Iterator[CompiledFilter]:
    """The emitted files as a loaded library, by ``command`` or else by the first compiler that is found.

    Nothing stays on the disk.

    :raises Lacking: without a compiler.
    :raises Refused: where the compiler refuses the code, as it may with templates of the user's own.
    """
    command = command or find_compiler()
    with TemporaryDirectory(prefix="afterkick-", ignore_cleanup_errors=True) as folder:
        for name, text in files.items():
            Path(folder, name).write_text(text, encoding="utf-8", newline="\n")
        sources = [name for name in files if name.endswith(".c")]
        library = Path(folder, f"{program.name}.so")
        call = [*command, *FLAGS, *(ZIG_FLAGS if is_wheel(command) else ()), *sources, "-o", library.name]
        call_compiler(call, folder, f"{program.name}.c", "check your templates, and the variable CC or --cc")
        yield CompiledFilter(ctypes.CDLL(str(library)), program, shown(command))


def run_on_host(files: dict[str, str], program: "Program | FloatProgram", inputs: ArrayLike) -> HostRun:
    """Compile, run the self-test, and filter inputs of shape (n,) or (n, m), each column from a reset state.

    :raises Lacking: without a compiler.
    """
    samples = np.asarray(inputs)
    columns = samples[:, None] if samples.ndim == 1 else samples
    outputs = np.empty(columns.shape, dtype=_sample_types(program)[1])
    with compile_on_host(files, program) as compiled:
        verdict = compiled.selftest()
        for i in range(columns.shape[1]):
            compiled.reset()
            outputs[:, i] = compiled.run(columns[:, i])
        return HostRun(outputs.reshape(samples.shape), verdict, compiled.compiler)
