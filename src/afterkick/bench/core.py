"""An emulated core with a linked program in its memory: calls, counted instructions, the depth of the stack."""

from collections.abc import Callable, Iterator
from contextlib import contextmanager
from typing import TYPE_CHECKING, Any

import numpy as np
from attrs import frozen
from numpy.typing import NDArray

from afterkick.bench.cores import Core
from afterkick.bench.cross import Build, Function, Image
from afterkick.bench.harness import Harness
from afterkick.errors import Lacking, Problem, Refused

if TYPE_CHECKING:
    from unicorn import Uc

__all__ = ["Counts", "EmulatedFilter", "Fault", "require_emulator"]

PAGE = 0x1000
STATE, INPUT, OUTPUT, STACK, END = 0x6000_0000, 0x6100_0000, 0x6200_0000, 0x6300_0000, 0x6400_0000
"""Where things are; between them nothing is mapped, so that a stray access ends the run."""
BUFFER_BYTES = 0x1_0000
STACK_BYTES = 0x1_0000
TIME_LIMIT_S = 120
"""Of one call, which takes far less than a second."""
COUNTED_AT_ONCE = 256
"""Single calls, a hundred times as slow as others."""
STATE_BYTES = 0x1_0000
PAINT = np.random.default_rng(0x5A).bytes(STACK_BYTES)
"""On the stack before calls are counted; no two words alike, so that no push leaves what was there."""
GARBAGE = 0xC3
"""In the state before it is set, so that nothing relies on zeros."""


class Fault(Exception):
    """The code did what a core would stop at, or did not come back."""


@frozen(eq=False)
class Counts:
    """Calls on the core, each from its first instruction to its return; skipped conditional instructions count."""

    instructions: NDArray[np.int64]
    """One entry a call."""
    stack_bytes: int
    """How far the deepest call reached below the stack pointer at its entry."""
    helpers: frozenset[Function]
    """What was called outside the emitted code."""


def require_emulator() -> None:
    """
    :raises Lacking: without unicorn.
    """
    try:
        import unicorn  # noqa: F401  # in the extra: only the bench of a core needs it
    except ImportError:
        raise Lacking("no emulator: pip install 'afterkick[bench]'") from None


class EmulatedFilter:
    """The functions of one design on an emulated core.

    Its methods raise :class:`Fault` where the code strays.
    """

    def __init__(self, build: Build, harness: Harness, core: Core) -> None:
        """
        :raises Refused: for a program that is linked where it can't be.
        """
        assert build.image is not None
        self.build, self.harness, self.image = build, harness, build.image
        self._uc, registers = _machine(core)
        self._registers, self._stack_pointer, self._link, self._program_counter = registers
        self._thumb = core.family == "arm"
        self._map(build.image)
        self._state = STATE + STATE_BYTES - build.state_bytes  # up to the end of its map, as the samples are
        self.memory = bytes([GARBAGE]) * build.state_bytes

    def _map(self, image: Image) -> None:
        import unicorn

        pages: dict[int, int] = {}
        for part in image.segments:
            mode = unicorn.UC_PROT_READ
            mode |= (unicorn.UC_PROT_EXEC if part.executable else 0) | (unicorn.UC_PROT_WRITE if part.writable else 0)
            for page in range(part.address // PAGE, (part.address + len(part.content) - 1) // PAGE + 1):
                pages[page] = pages.get(page, 0) | mode
        data = unicorn.UC_PROT_READ | unicorn.UC_PROT_WRITE
        try:
            for page, mode in pages.items():
                self._uc.mem_map(page * PAGE, PAGE, mode)
            self._uc.mem_map(STATE, STATE_BYTES, data)
            self._uc.mem_map(INPUT, BUFFER_BYTES, unicorn.UC_PROT_READ)
            self._uc.mem_map(OUTPUT, BUFFER_BYTES, data)
            self._uc.mem_map(STACK, STACK_BYTES, data)
            self._uc.mem_map(END, PAGE, unicorn.UC_PROT_READ | unicorn.UC_PROT_EXEC)
        except unicorn.UcError as error:
            found = f"a program linked where it does not fit: {error}"
            raise Refused(
                Problem("linking", found, "addresses below 0x60000000", "leave out the linker script")
            ) from error
        for part in image.segments:
            self._uc.mem_write(part.address, part.content)

    @property
    def memory(self) -> bytes:
        """All of the struct."""
        return bytes(self._uc.mem_read(self._state, self.build.state_bytes))

    @memory.setter
    def memory(self, content: bytes) -> None:
        self._uc.mem_write(self._state, content)

    def state(self) -> dict[str, Any]:
        """Each state word."""
        return self.harness.state(self.memory, self.build.offsets)

    def reset(self) -> None:
        """NAME_reset, over memory that holds anything."""
        self.memory = bytes([GARBAGE]) * self.build.state_bytes
        self._call(f"{self.harness.prefix}_reset", self._state)

    def preset(self, code: int, wanted: int) -> None:
        """NAME_preset."""
        self.memory = bytes([GARBAGE]) * self.build.state_bytes
        self._call(f"{self.harness.prefix}_preset", self._state, code, wanted)

    def steps(self, samples: NDArray[Any]) -> NDArray[Any]:
        """A call of NAME_step for each sample."""
        return self._filter(self.harness.steps_symbol, samples, in_place=False)

    def run(self, samples: NDArray[Any], in_place: bool) -> NDArray[Any]:
        """One call of NAME_run."""
        return self._filter(f"{self.harness.prefix}_run", samples, in_place)

    def selftest(self) -> int:
        """NAME_selftest."""
        answer = self._call(f"{self.harness.prefix}_selftest")
        return answer - (1 << 32) if answer >> 31 else answer

    def counted_steps(self, samples: NDArray[Any]) -> Counts:
        """As :meth:`steps`: a count for each sample."""
        with self._recorded() as recorder:
            for start in range(0, len(samples), COUNTED_AT_ONCE):
                self.steps(samples[start : start + COUNTED_AT_ONCE])
        return self._counts(recorder)

    def counted_runs(self, blocks: NDArray[Any]) -> Counts:
        """A call of NAME_run, in place, for each row: a count for each."""
        with self._recorded() as recorder:
            for block in blocks:
                recorder.outside = True
                self.run(block, in_place=True)
        return self._counts(recorder)

    @contextmanager
    def _recorded(self) -> "Iterator[_Recorder]":
        import unicorn

        loop = next(one for one in self.image.functions if one.name == self.harness.steps_symbol)
        recorder = _Recorder(self.image, self._thumb, loop, lambda: int(self._uc.reg_read(self._stack_pointer)))
        self._uc.mem_write(STACK, PAINT)
        self._uc.ctl_flush_tb()  # what is translated already would not be seen
        handle = self._uc.hook_add(unicorn.UC_HOOK_BLOCK, recorder.block)
        try:
            yield recorder
        finally:
            self._uc.hook_del(handle)
            self._uc.ctl_flush_tb()

    def _counts(self, recorder: "_Recorder") -> Counts:
        left = np.frombuffer(bytes(self._uc.mem_read(STACK, STACK_BYTES)), np.uint32)
        changed = np.flatnonzero(left != np.frombuffer(PAINT, np.uint32))
        lowest = STACK + (4 * int(changed[0]) if changed.size else STACK_BYTES)
        own = f"{self.harness.prefix}_"
        called = (function for function in self.image.functions if not function.name.startswith(own))
        helpers = frozenset(
            f for f in called if any(f.address <= place < f.address + f.size for place in recorder.places)
        )
        return Counts(np.array(recorder.totals, dtype=np.int64), max(recorder.stack_at_entry - lowest, 0), helpers)

    def _filter(self, entry: str, samples: NDArray[Any], in_place: bool) -> NDArray[Any]:
        content = samples.astype(self.harness.sample).tobytes()
        size, kind = len(content), self.harness.sample
        if size > BUFFER_BYTES:
            first = BUFFER_BYTES // kind.itemsize
            assert entry == self.harness.steps_symbol, "a block that is longer than the buffer"
            parts = [samples[k : k + first] for k in range(0, len(samples), first)]
            return np.concatenate([self._filter(entry, part, in_place) for part in parts])
        # the ends are those of their maps: what lies behind is out of bounds
        source, dest = (OUTPUT if in_place else INPUT) + BUFFER_BYTES - size, OUTPUT + BUFFER_BYTES - size
        self._uc.mem_write(source, content)
        self._call(entry, self._state, source, dest, len(samples))
        return np.frombuffer(bytes(self._uc.mem_read(dest, size)), kind)

    def _call(self, entry: str, *arguments: int) -> int:
        """The first result of a function of integers and pointers, as 32 bits."""
        import unicorn

        for register, value in zip(self._registers, arguments, strict=False):
            self._uc.reg_write(register, value & 0xFFFF_FFFF)
        self._uc.reg_write(self._stack_pointer, STACK + STACK_BYTES)
        self._uc.reg_write(self._link, END | self._thumb)
        try:
            self._uc.emu_start(self.image.entries[entry], END, timeout=TIME_LIMIT_S * 1_000_000)
        except unicorn.UcError as error:
            raise Fault(f"{entry} stops at {self._where()}: {error}") from error
        if self._place() != END:
            raise Fault(f"{entry} does not return within {TIME_LIMIT_S} s")
        return int(self._uc.reg_read(self._registers[0])) & 0xFFFF_FFFF

    def _place(self) -> int:
        return int(self._uc.reg_read(self._program_counter))

    def _where(self) -> str:
        place = self._place()
        inside = (f for f in self.image.functions if f.address <= place < f.address + f.size)
        return next((f"{f.name}+{place - f.address}" for f in inside), f"{place:#x}")


class _Recorder:
    """Adds up the instructions of each call, block of instructions by block."""

    def __init__(self, image: Image, thumb: bool, loop: Function, stack_pointer: Callable[[], int]) -> None:
        self.totals: list[int] = []
        self.outside = True
        """Whether the next block outside the harness is the first one of a call."""
        self.stack_at_entry = 0
        self._numbers: dict[tuple[int, int], int] = {}
        self._code = {part.address: part.content for part in image.segments if part.executable}
        self._is_long = _is_long_thumb if thumb else _is_long_riscv
        self._loop = range(loop.address, loop.address + loop.size)
        self._stack_pointer = stack_pointer

    @property
    def places(self) -> set[int]:
        """The addresses of the blocks that were run."""
        return {address for address, _ in self._numbers}

    def block(self, _: "Uc", address: int, size: int, __: object) -> None:
        """Called before each block of instructions, which has one way in and one way out."""
        if address in self._loop:
            self.outside = True
            return
        if self.outside:
            self.outside = False
            self.totals.append(0)
            if not self.stack_at_entry:
                self.stack_at_entry = self._stack_pointer()
        key = address, size
        number = self._numbers.get(key)
        if number is None:
            number = self._numbers[key] = self._count(address, size)
        self.totals[-1] += number

    def _count(self, address: int, size: int) -> int:
        start, content = next((a, c) for a, c in self._code.items() if a <= address < a + len(c))
        place, end, number = address - start, address - start + size, 0
        while place < end:
            place += 4 if self._is_long(int.from_bytes(content[place : place + 2], "little")) else 2
            number += 1
        return number


def _is_long_thumb(halfword: int) -> bool:
    """Whether an instruction has a second halfword (Arm v7-M Architecture Reference Manual, A5.1)."""
    return halfword >> 11 in (0b11101, 0b11110, 0b11111)


def _is_long_riscv(halfword: int) -> bool:
    """Whether an instruction has 32 bits (RISC-V Instruction Set Manual, volume I, 1.5)."""
    return halfword & 0b11 == 0b11


def _machine(core: Core) -> "tuple[Uc, tuple[tuple[int, ...], int, int, int]]":
    """The emulator, and its registers: arguments, stack pointer, return address, program counter."""
    import unicorn
    from unicorn import arm_const as arm
    from unicorn import riscv_const as riscv

    if core.family == "arm":
        uc = unicorn.Uc(unicorn.UC_ARCH_ARM, unicorn.UC_MODE_THUMB | unicorn.UC_MODE_MCLASS)
        uc.ctl_set_cpu_model(getattr(arm, core.model))
        arguments = (arm.UC_ARM_REG_R0, arm.UC_ARM_REG_R1, arm.UC_ARM_REG_R2, arm.UC_ARM_REG_R3)
        return uc, (arguments, arm.UC_ARM_REG_SP, arm.UC_ARM_REG_LR, arm.UC_ARM_REG_PC)
    uc = unicorn.Uc(unicorn.UC_ARCH_RISCV, unicorn.UC_MODE_RISCV32)
    uc.ctl_set_cpu_model(getattr(riscv, core.model))
    arguments = (riscv.UC_RISCV_REG_A0, riscv.UC_RISCV_REG_A1, riscv.UC_RISCV_REG_A2, riscv.UC_RISCV_REG_A3)
    return uc, (arguments, riscv.UC_RISCV_REG_SP, riscv.UC_RISCV_REG_RA, riscv.UC_RISCV_REG_PC)
