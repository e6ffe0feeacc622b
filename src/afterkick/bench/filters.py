"""What the bench needs of a compiled filter, on this machine or on an emulated core."""

import ctypes
from typing import Any, Protocol

import numpy as np
from numpy.typing import NDArray

from afterkick.bench.harness import Harness

__all__ = ["BenchFilter", "HostFilter"]


class BenchFilter(Protocol):
    """The functions of one design, with one memory."""

    @property
    def memory(self) -> bytes:
        """All of the struct."""

    @memory.setter
    def memory(self, content: bytes) -> None: ...

    def state(self) -> dict[str, Any]:
        """Each state word."""

    def reset(self) -> None:
        """NAME_reset, over memory that holds anything."""

    def preset(self, code: int, wanted: int) -> None:
        """NAME_preset, over memory that holds anything."""

    def steps(self, samples: NDArray[Any]) -> NDArray[Any]:
        """A call of NAME_step for each sample."""

    def run(self, samples: NDArray[Any], in_place: bool) -> NDArray[Any]:
        """One call of NAME_run."""

    def selftest(self) -> int:
        """NAME_selftest."""


class HostFilter:
    """In a library of this machine."""

    def __init__(self, library: ctypes.CDLL, harness: Harness) -> None:
        self.harness = harness
        table = (ctypes.c_uint32 * (len(harness.members) + 1)).in_dll(library, harness.layout_symbol)
        self.state_bytes, *offsets = list(table)
        self._offsets = tuple(offsets)
        self._memory = ctypes.create_string_buffer(self.state_bytes)
        self._library = library

    @property
    def memory(self) -> bytes:
        return self._memory.raw

    @memory.setter
    def memory(self, content: bytes) -> None:
        self._memory.raw = content

    def state(self) -> dict[str, Any]:
        return self.harness.state(self.memory, self._offsets)

    def reset(self) -> None:
        self._call("reset", self._memory)

    def preset(self, code: int, wanted: int) -> None:
        sample: Any = np.ctypeslib.as_ctypes_type(self.harness.sample)
        self._call("preset", self._memory, sample(code), sample(wanted))

    def steps(self, samples: NDArray[Any]) -> NDArray[Any]:
        return self._filter("bench_steps", samples, in_place=False)

    def run(self, samples: NDArray[Any], in_place: bool) -> NDArray[Any]:
        return self._filter("run", samples, in_place)

    def selftest(self) -> int:
        return self._call("selftest")

    def _filter(self, what: str, samples: NDArray[Any], in_place: bool) -> NDArray[Any]:
        source = samples.astype(self.harness.sample)  # a copy
        dest = source if in_place else np.empty_like(source)
        places = (ctypes.c_void_p(array.ctypes.data) for array in (source, dest))
        self._call(what, self._memory, *places, ctypes.c_uint32(source.size))
        return dest

    def _call(self, what: str, *arguments: Any) -> int:
        function = getattr(self._library, f"{self.harness.prefix}_{what}")
        function.restype = ctypes.c_int32  # read of the self-test alone
        return int(function(*arguments))
