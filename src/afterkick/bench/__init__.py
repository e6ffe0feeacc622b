"""Compiled code against the simulator."""

from afterkick.bench.host import HostRun, compile_on_host, run_on_host

__all__ = ["HostRun", "compile_on_host", "run_on_host"]
