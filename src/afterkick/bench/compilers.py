"""Compilers as commands: which there is, and one call of it."""

import importlib.util
import os
import shlex
import shutil
import subprocess
import sys
from pathlib import Path

from afterkick.errors import Lacking, Problem, Refused

__all__ = ["call_compiler", "find_compiler", "is_wheel", "named_compiler", "shown", "wheel_compiler"]

TIME_LIMIT_S = 300
"""The compiler of the wheel builds its helper routines at the first link for a core."""
WHEEL_NAME = "ziglang cc"


def find_compiler() -> tuple[str, ...]:
    """The command of a C compiler for this machine: $CC, else one on the path, else that of the ziglang wheel.

    :raises Lacking: where there is none.
    """
    if os.environ.get("CC", "").strip():
        return named_compiler(os.environ["CC"], "CC")
    for name in ("gcc", "cc", "clang"):
        path = shutil.which(name)
        if path is not None:
            return (path,)
    return wheel_compiler("no C compiler: install the extra, pip install 'afterkick[bench]', or set CC")


def named_compiler(text: str, where: str) -> tuple[str, ...]:
    """A command with its options, as a shell would read it; ``where`` it is given is for the message.

    :raises Refused: for text that a shell would not read.
    :raises Lacking: where its program is not on the path.
    """
    try:
        command = tuple(shlex.split(text))
    except ValueError as error:
        command, found = (), f"{text!r}: {error}"
    else:
        found = "nothing"
    if not command:
        raise Refused(Problem(where, found, "a compiler and its options", "correct the command"))
    if shutil.which(command[0]) is None:
        raise Lacking(f"{where} names {command[0]}, which is not on the path")
    return command


def wheel_compiler(
    lacking: str = "no cross compiler: pip install 'afterkick[bench]', or name yours with --cc",
) -> tuple[str, ...]:
    """That of the ziglang wheel.

    :raises Lacking: where the wheel is not installed.
    """
    if importlib.util.find_spec("ziglang") is None:
        raise Lacking(lacking)
    return (sys.executable, "-m", "ziglang", "cc")


def is_wheel(command: tuple[str, ...]) -> bool:
    """Whether it is the wheel's compiler, however it is called."""
    return "ziglang" in command or Path(command[0]).name == "zig"


def shown(command: tuple[str, ...]) -> str:
    """The command for readers and files: without the paths of this machine."""
    if "ziglang" in command:
        words = [WHEEL_NAME, *command[command.index("ziglang") + 2 :]]
    else:
        words = [Path(command[0]).name, *command[1:]]
    return " ".join(words)


def call_compiler(call: list[str], folder: Path | str, where: str, remedy: str) -> str:
    """What a successful call prints on standard output.

    :raises Lacking: where the compiler does not run.
    :raises Refused: where it refuses the code: ``where`` is what it was given.
    """
    try:
        done = subprocess.run(call, cwd=folder, capture_output=True, text=True, timeout=TIME_LIMIT_S, check=False)
    except (OSError, subprocess.TimeoutExpired) as error:
        raise Lacking(f"the compiler {call[0]} does not run: {error}") from error
    if done.returncode != 0:
        lines = [line for line in done.stderr.splitlines() if "error" in line] or done.stderr.splitlines()
        found = f"{Path(call[0]).name} refuses the code: {' | '.join(lines[:3])}"
        raise Refused(Problem(where, found, "C99", remedy))
    return done.stdout
