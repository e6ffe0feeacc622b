"""What the C templates of a filter in single precision place."""

from attrs import frozen

from afterkick.emit.banner import source_banner
from afterkick.emit.float_banner import float_header_banner
from afterkick.emit.float_literals import single
from afterkick.emit.literals import signed
from afterkick.emit.symbols import Symbols
from afterkick.emit.view import BlockView, CheckView, LineView, MemberView
from afterkick.fixed.program import Move
from afterkick.floating.program import FloatFlush, FloatProduct, FloatProgram, FloatProgramSection, FloatStep, FloatSum

__all__ = ["FloatProgramView", "float_program_view"]

FORMAT = "FLT_RADIX == 2 && FLT_MANT_DIG == 24 && FLT_MIN_EXP == -125 && FLT_MAX_EXP == 128"
"""IEEE 754 binary32 as <float.h> describes it (ISO/IEC 9899:1999, 5.2.4.2.2)."""


@frozen
class FloatProgramView:
    """The header and the source of a program."""

    symbols: Symbols
    header_banner: tuple[str, ...]
    source_banner: tuple[str, ...]
    input: str
    output: str
    members: tuple[MemberView, ...]
    flush_symbol: str
    flush_below: str
    """A literal; empty where nothing is flushed."""
    checks: tuple[CheckView, ...]
    blocks: tuple[BlockView, ...]


def float_program_view(program: FloatProgram, notes: tuple[str, ...]) -> FloatProgramView:
    """Every decision that printing a FloatProgram as C needs.

    :raises Refused: for a name that can't be a prefix.
    """
    symbols = Symbols.of(program.name)
    printer = _Printer(program, symbols)
    return FloatProgramView(
        symbols=symbols,
        header_banner=float_header_banner(program, notes),
        source_banner=source_banner(program),
        input=symbols.local(program.input),
        output=symbols.local(program.output),
        members=tuple(_member(name, symbols) for name in program.states),
        flush_symbol=printer.flush_symbol,
        flush_below="" if program.flush_below is None else single(program.flush_below),
        checks=(CheckView(symbols("check_float_is_single_precision"), FORMAT),),
        blocks=tuple(printer.block(number) for number in range(1, len(program.sections) + 1)),
    )


def _member(name: str, symbols: Symbols) -> MemberView:
    signal, _, place = name.rpartition("_")
    age = f"{place} sample{'' if place == '1' else 's'}"
    comment = f"section {signal[1:]}, state {place}" if signal.startswith("s") else f"{signal}, {age} ago"
    return MemberView("float", symbols.local(name), comment)


class _Printer:
    """Steps as C statements: one operation a product, so that compilers that fuse within an expression don't."""

    def __init__(self, program: FloatProgram, symbols: Symbols) -> None:
        self.program, self.symbols = program, symbols
        self.states = frozenset(program.states)
        self.flush_symbol = symbols("small")

    def block(self, number: int) -> BlockView:
        """The statements of section ``number``, 1 for the first."""
        section = self.program.sections[number - 1]
        title = f"Section {number} of {len(self.program.sections)}: from {section.source} to {section.dest}."
        if section.numerator_scale:
            title += f" Its b are scaled by {section.numerator_scale}, as 1 + a1 + a2 is, to keep the DC gain."
        return BlockView(title, tuple(line for step in section.steps for line in self._lines(section, step)))

    def _lines(self, section: FloatProgramSection, step: FloatStep) -> tuple[LineView, ...]:
        if isinstance(step, FloatFlush):
            small = " && ".join(f"{self.flush_symbol}({self._read(state)})" for state in step.states)
            codes = [f"if ({small}) {{", *(f"    {self._read(state)} = 0.0f;" for state in step.states), "}"]
            return tuple(LineView(code) for code in codes)
        return (self._line(section, step),)

    def _line(self, section: FloatProgramSection, step: FloatProduct | FloatSum | Move) -> LineView:
        if isinstance(step, FloatProduct):
            code = f"const float {self._read(step.dest)} = {single(step.factor)} * {self._read(step.word)};"
            return LineView(code, _comment(section, step.label))
        if isinstance(step, FloatSum):
            return LineView(f"{self._store(step.dest)} = {self._sum(step)};")
        return LineView(f"{self._store(step.dest)} = {self._read(step.source)};")

    def _sum(self, step: FloatSum) -> str:
        text = ""
        for sign, word in step.terms:
            mark = ("-" if sign < 0 else "") if not text else (" - " if sign < 0 else " + ")
            text += mark + self._read(word)
        return text

    def _read(self, name: str) -> str:
        local = self.symbols.local(name)
        return f"state->{local}" if name in self.states else local

    def _store(self, name: str) -> str:
        return self._read(name) if name in self.states else f"const float {self._read(name)}"


def _comment(section: FloatProgramSection, label: str) -> str:
    found = next(c for c in section.coefficients if c.name == label)
    return f"{label} = {found.wanted}, off by {signed(found.error_last_places)} last places"
