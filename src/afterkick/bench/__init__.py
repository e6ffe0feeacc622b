"""Compiled code against the simulator."""

from afterkick.bench.bench import Bench, bench
from afterkick.bench.compare import Comparison, compare_on_host
from afterkick.bench.host import HostRun, compile_on_host, run_on_host

__all__ = ["Bench", "Comparison", "HostRun", "bench", "compare_on_host", "compile_on_host", "run_on_host"]
