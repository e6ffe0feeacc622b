"""The emulated cores that a profile may name."""

from collections.abc import Callable

from attrs import frozen

from afterkick.errors import Problem, Refused

__all__ = ["CORES", "Core", "find_core"]


@frozen
class Core:
    """How to emulate a core, and what its ELF files look like."""

    name: str
    family: str
    """Of unicorn: "arm" or "riscv"."""
    model: str
    """The name of unicorn's constant."""
    machine: str
    """Of the ELF file."""
    runs: Callable[[str], bool]
    """Whether the core runs code of an architecture: the emulator itself does not refuse what the core lacks."""


def _of_rv32imc(architecture: str) -> bool:
    """ "rv32i2p1_m2p0_c2p0": single-letter extensions come first, each with its version."""
    parts = [part for part in architecture.removeprefix("rv32").split("_") if not part.startswith(("z", "s", "x"))]
    return architecture.startswith("rv32") and all(part[0] in "iemc" for part in parts)


CORES = {
    core.name: core
    for core in (
        Core("cortex-m0", "arm", "UC_CPU_ARM_CORTEX_M0", "EM_ARM", {"v6-M", "v6S-M"}.__contains__),
        Core("cortex-m4", "arm", "UC_CPU_ARM_CORTEX_M4", "EM_ARM", {"v6-M", "v6S-M", "v7", "v7E-M"}.__contains__),
        Core("rv32", "riscv", "UC_CPU_RISCV32_ANY", "EM_RISCV", _of_rv32imc),
    )
}


def find_core(name: str) -> Core:
    """The core of that name.

    :raises Refused: where there is none.
    """
    if name not in CORES:
        raise Refused(Problem("emulator.core", f'"{name}"', ", ".join(CORES), "correct the profile"))
    return CORES[name]
