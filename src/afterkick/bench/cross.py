"""Emitted C as a program for another core: compiled, linked without any start-up code, read back from its ELF files.

The instruction counts and sizes are those of NAME.c compiled by itself; only helper routines of the compiler's own
library (64-bit products on a small core, floating point in software) come from elsewhere.
"""

from collections.abc import Iterator
from io import BytesIO
from pathlib import Path
from tempfile import TemporaryDirectory
from typing import TYPE_CHECKING

import numpy as np
from attrs import frozen

from afterkick.bench.compilers import call_compiler, is_wheel, shown, wheel_compiler
from afterkick.bench.cores import Core
from afterkick.bench.harness import Harness
from afterkick.errors import Lacking, Problem, Refused
from afterkick.targets import TargetProfile

if TYPE_CHECKING:
    from elftools.elf.elffile import ELFFile
    from elftools.elf.sections import Symbol

__all__ = ["Build", "Function", "Image", "Segment", "cross_compile"]

# Fused, a product and a sum of singles round once instead of twice.
FLAGS = ("-std=c99", "-ffp-contract=off")
FREESTANDING = "-ffreestanding"
"""For any compiler, as no C library is there: gcc looks for the library's stdint.h otherwise."""
LINK_FLAGS = ("-O2",)
"""Behind those of the profile: at -Os the wheel's compiler leaves out the symbols."""
WRITE, ALLOCATE, EXECUTE = 1, 2, 4
"""Flags of a section (ELF specification, "sh_flags")."""


@frozen
class Segment:
    """A part of the core's memory."""

    address: int
    content: bytes
    writable: bool
    executable: bool


@frozen
class Function:
    """A function in the linked program."""

    name: str
    address: int
    """Without the bit that marks Thumb code."""
    size: int


@frozen
class Image:
    """A linked program."""

    segments: tuple[Segment, ...]
    entries: dict[str, int]
    """What to call for each name: with the bit that marks Thumb code."""
    functions: tuple[Function, ...]


@frozen
class Build:
    """Emitted C after the compiler."""

    compiler: str
    """The command without paths."""
    code_bytes: int
    """Of NAME.c, the literals that stand among the instructions included."""
    constant_bytes: int
    """Of NAME.c beside its code; what it keeps in RAM of its own too, which the emitted C has none of."""
    state_bytes: int
    offsets: tuple[int, ...]
    """Of the harness's members in the struct."""
    image: Image | None
    """None where it was not linked."""


def cross_compile(
    files: dict[str, str], harness: Harness, profile: TargetProfile, command: tuple[str, ...] | None, core: Core | None
) -> Build:
    """Compile the emitted files with the wheel's compiler as the profile says, or with ``command`` as it stands.

    It is linked where there is a ``core`` to run it.  Nothing stays on the disk.

    :raises Lacking: without the compiler, or without pyelftools.
    :raises Refused: where the compiler refuses the code, or makes no ELF file of the core's.
    """
    _require_reader()
    prefix = harness.prefix
    if command is None:
        target = ("-target", profile.compiler.target, *profile.compiler.flags)
        compiling = (*wheel_compiler(), *target, *FLAGS)
        linking = (*wheel_compiler(), *target, *LINK_FLAGS)
        remedy, name = (
            "check your templates, and [compiler] in the profile",
            f"{shown(wheel_compiler())} {' '.join(target)}",
        )
    else:
        compiling = linking = command
        remedy, name = "check your templates, and the command of --cc", shown(command)
    with TemporaryDirectory(prefix="afterkick-", ignore_cleanup_errors=True) as folder:
        for file, text in (files | {harness.file: harness.source}).items():
            Path(folder, file).write_text(text, encoding="utf-8", newline="\n")
        sources = [file for file in (*files, harness.file) if file.endswith(".c")]
        for source in sources:
            call_compiler([*compiling, FREESTANDING, "-c", source, "-o", f"{source}.o"], folder, source, remedy)
        own = _elf(Path(folder, f"{prefix}.c.o"), remedy)
        sizes = list(_sizes(own))
        layout = _table(
            _elf(Path(folder, f"{harness.file}.o"), remedy), harness.layout_symbol, len(harness.members) + 1
        )
        machine, architecture = own.header.e_machine, _architecture(own)
        image = None
        if core is not None:
            if machine != core.machine or not core.runs(architecture):
                found = f"{name} compiles for {machine.removeprefix('EM_')} {architecture}".rstrip()
                change = "name the core in the flags of the profile, or in --cc"
                raise Refused(Problem("compiler", found, f"code that {core.name} runs", change))
            objects = [f"{source}.o" for source in sources]
            entries = [f"{prefix}_{what}" for what in ("reset", "step", "run", "preset", "selftest")]
            roots = [f"-Wl,-u,{entry}" for entry in (*entries[:3], harness.steps_symbol)]
            call = [*linking, *_without_libraries(linking), *roots, "-Wl,--gc-sections", f"-Wl,-e,{entries[4]}"]
            helpers = _helper_library(linking, folder)
            call_compiler([*call, *objects, *helpers, "-o", "linked"], folder, "linking", remedy)
            image = _image(_elf(Path(folder, "linked"), remedy), (*entries, harness.steps_symbol), remedy)
        return Build(
            compiler=name,
            code_bytes=sum(size for size, flags in sizes if flags & EXECUTE),
            constant_bytes=sum(size for size, flags in sizes if not flags & EXECUTE),
            state_bytes=layout[0],
            offsets=layout[1:],
            image=image,
        )


def _require_reader() -> None:
    try:
        import elftools.elf.elffile  # noqa: F401  # in the extra: only the bench of a core needs it
    except ImportError:
        raise Lacking("no reader of ELF files: pip install 'afterkick[bench]'") from None


def _elf(path: Path, remedy: str) -> "ELFFile":
    from elftools.common.exceptions import ELFError
    from elftools.elf.elffile import ELFFile

    try:
        with path.open("rb") as file:
            content = BytesIO(file.read())
        return ELFFile(content)
    except (OSError, ELFError) as error:
        raise Refused(Problem(path.name, f"no ELF file: {error}", "an ELF object", remedy)) from error


def _sizes(elf: "ELFFile") -> Iterator[tuple[int, int]]:
    """Size and flags of the sections that take memory; tables for unwinding, which C has no use for, are left out."""
    for section in elf.iter_sections():
        takes_memory = section["sh_flags"] & ALLOCATE and section["sh_type"] in ("SHT_PROGBITS", "SHT_NOBITS")
        if takes_memory and not section.name.startswith((".eh_frame", ".ARM.ex")):
            yield section["sh_size"], section["sh_flags"]


def _symbols(elf: "ELFFile") -> "list[Symbol]":
    from elftools.elf.sections import SymbolTableSection

    table = elf.get_section_by_name(".symtab")
    return list(table.iter_symbols()) if isinstance(table, SymbolTableSection) else []


def _table(elf: "ELFFile", name: str, length: int) -> tuple[int, ...]:
    """A table of 32-bit numbers in an object file."""
    symbol = next(symbol for symbol in _symbols(elf) if symbol.name == name)
    section = elf.get_section(symbol["st_shndx"])
    content = section.data()[symbol["st_value"] :][: 4 * length]
    return tuple(int(value) for value in np.frombuffer(content, "<u4" if elf.little_endian else ">u4"))


ARM_ARCHITECTURES = {10: "v7", 11: "v6-M", 12: "v6S-M", 13: "v7E-M", 16: "v8-M.base", 17: "v8-M.main"}
"""Tag_CPU_arch (Addenda to the ABI for the Arm Architecture, "Build attributes"; those of M-profile cores)."""


def _architecture(elf: "ELFFile") -> str:
    """As the compiler wrote it down: "v6S-M", "rv32i2p1_m2p0_c2p0"; empty where it did not."""
    from elftools.elf.sections import AttributesSection

    for section in elf.iter_sections():
        if not isinstance(section, AttributesSection):
            continue
        for vendor in section.iter_subsections():
            for scope in vendor.iter_subsubsections():
                for attribute in scope.iter_attributes():
                    if attribute.tag == "TAG_CPU_ARCH":
                        return ARM_ARCHITECTURES.get(attribute.value, f"Tag_CPU_arch {attribute.value}")
                    if attribute.tag == "TAG_ARCH":
                        return str(attribute.value)
    return ""


def _without_libraries(command: tuple[str, ...]) -> tuple[str, ...]:
    """The wheel's compiler has no C library for these cores, and would leave out its helper routines too."""
    return () if is_wheel(command) else ("-nostdlib",)


def _helper_library(command: tuple[str, ...], folder: str) -> list[str]:
    """The archive of helper routines of a compiler that does not link it by itself."""
    if is_wheel(command):
        return []
    asked = [*command, "-print-libgcc-file-name"]  # gcc and clang alike
    path = call_compiler(asked, folder, "--cc", "name a gcc or a clang").strip()
    return [path] if Path(path).is_file() else []


def _image(elf: "ELFFile", wanted: tuple[str, ...], remedy: str) -> Image:
    segments = tuple(
        Segment(
            part["p_vaddr"],
            part.data().ljust(part["p_memsz"], b"\0"),
            bool(part["p_flags"] & 2),  # PF_W, PF_X
            bool(part["p_flags"] & 1),
        )
        for part in elf.iter_segments("PT_LOAD")
        if part["p_memsz"]
    )
    symbols = _symbols(elf)
    entries = {symbol.name: symbol["st_value"] for symbol in symbols if symbol.name in wanted}
    if not entries:
        raise Refused(Problem("linking", "a program without symbols", "one with them", remedy + ": leave out -s"))
    thumb = 1 if elf.header.e_machine == "EM_ARM" else 0
    functions = {
        (symbol["st_value"] & ~thumb): Function(symbol.name, symbol["st_value"] & ~thumb, symbol["st_size"])
        for symbol in symbols
        if symbol["st_info"]["type"] == "STT_FUNC" and symbol["st_size"]
    }
    return Image(segments, entries, tuple(function for _, function in sorted(functions.items())))
