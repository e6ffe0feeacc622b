"""Compile emitted C for the machine this runs on and run it: the first judge of whether C and simulator agree.

The code is built as a shared library without the C library: what the emitted C needs is in it.
"""

import ctypes
import importlib.util
import os
import shlex
import shutil
import subprocess
import sys
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from tempfile import TemporaryDirectory
from typing import TYPE_CHECKING, Any

import numpy as np
from attrs import frozen
from numpy.typing import ArrayLike, NDArray

from afterkick.emit.literals import container_bits
from afterkick.errors import Lacking, Problem, Refused
from afterkick.fixed.program import Program, Role

if TYPE_CHECKING:
    from afterkick.floating import FloatProgram

__all__ = ["CompiledFilter", "HostRun", "compile_on_host", "find_compiler", "run_on_host"]

# Contracted, a product and a sum of singles round once instead of twice.
FLAGS = ("-std=c99", "-O2", "-ffp-contract=off", "-shared", "-fPIC", "-nostdlib")
ZIG_FLAGS = ("-fno-sanitize=all",)
TIME_LIMIT_S = 120
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


def find_compiler() -> tuple[str, ...]:
    """The command of a C compiler: $CC, else one on the path, else that of the ziglang wheel.

    :raises Lacking: where there is none.
    """
    named = shlex.split(os.environ.get("CC", ""))
    if named:
        if shutil.which(named[0]) is None:
            raise Lacking(f"CC names {named[0]}, which is not on the path")
        return tuple(named)
    for name in ("gcc", "cc", "clang"):
        path = shutil.which(name)
        if path is not None:
            return (path,)
    if importlib.util.find_spec("ziglang") is not None:
        return (sys.executable, "-m", "ziglang", "cc")
    raise Lacking("no C compiler: install the extra, pip install afterkick[bench], or set CC")


class CompiledFilter:
    """The functions of one design in a loaded library; its samples are codes or singles."""

    def __init__(self, library: ctypes.CDLL, program: "Program | FloatProgram", compiler: str) -> None:
        self.compiler = compiler
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
        return np.dtype(f"int{container_bits(program.word(program.input).bits)}"), np.dtype(np.int64)
    return np.dtype(np.float32), np.dtype(np.float32)


@contextmanager
def compile_on_host(files: dict[str, str], program: "Program | FloatProgram") -> Iterator[CompiledFilter]:
    """The emitted files as a loaded library; nothing stays on the disk.

    :raises Lacking: without a compiler.
    :raises Refused: where the compiler refuses the code, as it may with templates of the user's own.
    """
    command = find_compiler()
    zig = "ziglang" in command
    with TemporaryDirectory(prefix="afterkick-", ignore_cleanup_errors=True) as folder:
        for name, text in files.items():
            Path(folder, name).write_text(text, encoding="utf-8", newline="\n")
        sources = [name for name in files if name.endswith(".c")]
        library = Path(folder, f"{program.name}.so")
        call = [*command, *FLAGS, *(ZIG_FLAGS if zig else ()), *sources, "-o", library.name]
        try:
            done = subprocess.run(call, cwd=folder, capture_output=True, text=True, timeout=TIME_LIMIT_S, check=False)
        except (OSError, subprocess.TimeoutExpired) as error:
            raise Lacking(f"the compiler {command[0]} does not run: {error}") from error
        if done.returncode != 0:
            lines = [line for line in done.stderr.splitlines() if "error" in line] or done.stderr.splitlines()
            found = f"{Path(command[0]).name} refuses the code: {' | '.join(lines[:3])}"
            raise Refused(Problem(f"{program.name}.c", found, "C99", "check your templates and the variable CC"))
        yield CompiledFilter(ctypes.CDLL(str(library)), program, " ".join(["ziglang cc"] if zig else command))


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
