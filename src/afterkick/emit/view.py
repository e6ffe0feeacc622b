"""What the C templates place: every type, literal, symbol and line of code, decided here."""

from collections.abc import Iterable, Iterator

from attrs import frozen

from afterkick.emit.banner import header_banner, source_banner
from afterkick.emit.literals import container_bits, integer, signed
from afterkick.emit.promise import accepted_codes, others, promise
from afterkick.emit.symbols import Symbols
from afterkick.fixed.program import (
    Coefficient,
    Overflow,
    Preset,
    Program,
    Role,
    Rounding,
    Step,
    Sum,
    Term,
    Word,
)
from afterkick.fixed.ranges import Analysis, require_valid

__all__ = [
    "BlockView",
    "CheckView",
    "HelperView",
    "LineView",
    "MemberView",
    "PresetView",
    "ProgramView",
    "container",
    "program_view",
]

ROUNDING_HELPER = {Rounding.NEAREST: "nearest", Rounding.FLOOR: "shift", Rounding.EVEN: "even"}
HELPER_ORDER = ("shift", "nearest", "even", "clamp", "wrap")
"""Each one may call those before it."""


@frozen
class MemberView:
    """A state word in the struct."""

    type: str
    name: str
    comment: str


@frozen
class LineView:
    """One line of code with the comment behind it."""

    code: str
    comment: str = ""


@frozen
class BlockView:
    """The statements of one section."""

    title: str
    lines: tuple[LineView, ...]


@frozen
class PresetView:
    """The statements that let a filter that integrates go on without a bump."""

    wanted: str
    lines: tuple[LineView, ...]


@frozen
class HelperView:
    """A static inline function of one width."""

    kind: str
    bits: int
    symbol: str
    shift_symbol: str
    """The right shift of the same width."""


@frozen
class CheckView:
    """A type that can't be declared where the condition is false."""

    symbol: str
    condition: str


@frozen
class ProgramView:
    """The header and the source of a program."""

    symbols: Symbols
    header_banner: tuple[str, ...]
    source_banner: tuple[str, ...]
    data_type: str
    data_bits: int
    input: str
    output: str
    lowest: int
    highest: int
    others: str
    """What happens with codes below or above."""
    delay_samples: int
    members: tuple[MemberView, ...]
    helpers: tuple[HelperView, ...]
    checks: tuple[CheckView, ...]
    blocks: tuple[BlockView, ...]
    preset: PresetView | None


def container(bits: int) -> str:
    """The C type that holds a word of ``bits`` bits."""
    return f"int{container_bits(bits)}_t"


def program_view(program: Program, notes: tuple[str, ...]) -> ProgramView:
    """Every decision that printing a Program as C needs.

    :raises Refused: for a program whose sums could overflow, or a name that can't be a prefix.
    """
    symbols = Symbols.of(program.name)
    source = program.word(program.input)
    analysis = require_valid(program)
    accepted = accepted_codes(program)
    printer = _Printer(program, symbols, analysis)
    blocks = tuple(printer.block(number) for number in range(1, len(program.sections) + 1))
    preset = None
    if program.preset is not None:
        preset = PresetView(symbols.local(program.preset.wanted), printer.preset(program.preset))
    width = container_bits(source.bits)
    return ProgramView(
        symbols=symbols,
        header_banner=header_banner(program, notes),
        source_banner=(*source_banner(program), *promise(program)),
        data_type=container(source.bits),
        data_bits=source.bits,
        input=symbols.local(program.input),
        output=symbols.local(program.output),
        lowest=accepted.lowest,
        highest=accepted.highest,
        others=others(program),
        delay_samples=program.delay_samples,
        members=tuple(_member(word, symbols) for word in program.words if word.role is Role.STATE),
        helpers=printer.helpers(),
        checks=(
            CheckView(symbols("check_int_is_twos_complement"), "(-1 & 3) == 3"),
            CheckView(symbols("check_code_is_twos_complement"), f"INT{width}_MIN + INT{width}_MAX == -1"),
        ),
        blocks=blocks,
        preset=preset,
    )


def _member(word: Word, symbols: Symbols) -> MemberView:
    signal, _, age = word.name.rpartition("_")
    comment = f"{signal}, {age} sample{'' if age == '1' else 's'} ago" if signal and age.isdigit() else ""
    return MemberView(container(word.bits), symbols.local(word.name), comment)


class _Printer:
    """Steps as C statements; remembers which helpers they call."""

    def __init__(self, program: Program, symbols: Symbols, analysis: Analysis) -> None:
        self.program, self.symbols, self.may_overflow = program, symbols, analysis.may_overflow
        self.in_preset = analysis.preset_may_overflow
        self.words = {word.name: word for word in program.words}
        self.called: set[tuple[str, int]] = set()

    def block(self, number: int) -> BlockView:
        """The statements of section ``number``, 1 for the first."""
        section = self.program.sections[number - 1]
        title = f"Section {number} of {len(self.program.sections)}: from {section.source} to {section.dest}."
        return BlockView(title, tuple(self._lines(section.steps, section.coefficients)))

    def preset(self, preset: Preset) -> tuple[LineView, ...]:
        """The statements that set the states."""
        self.words |= {word.name: word for word in preset.words}
        self.may_overflow = self.in_preset
        return tuple(self._lines(preset.steps, ()))

    def _lines(self, steps: Iterable[Step], coefficients: tuple[Coefficient, ...]) -> Iterator[LineView]:
        for step in steps:
            if isinstance(step, Sum):
                yield from self._sum(step, coefficients)
            else:
                yield LineView(f"{self._store(step.dest)} = {self._read(step.source)};")

    def helpers(self) -> tuple[HelperView, ...]:
        """The helpers that the printed statements call, and those which these call."""
        needed = self.called | {("shift", bits) for kind, bits in self.called if kind in ("nearest", "even")}
        ordered = sorted(needed, key=lambda call: (call[1], HELPER_ORDER.index(call[0])))
        return tuple(
            HelperView(kind, bits, self.symbols(f"{kind}_{bits}"), self.symbols(f"shift_{bits}"))
            for kind, bits in ordered
        )

    def _sum(self, step: Sum, coefficients: tuple[Coefficient, ...]) -> list[LineView]:
        total = f"sum_{step.dest}"
        lines = []
        for i, term in enumerate(step.terms):
            product, negative = self._product(term, step.accumulator_bits)
            if i == 0:
                code = f"int{step.accumulator_bits}_t {total} = {'-' if negative else ''}{product};"
            else:
                # the type of the sum is wide enough for the negative of any word, which the word's own need not be
                operand = self._read(term.word) if term.factor == -1 else product
                code = f"{total} {'-' if negative else '+'}= {operand};"
            lines.append(LineView(code, _term_comment(coefficients, term)))
        quotient = total
        if step.right_shift:
            bits = step.accumulator_bits
            quotient = f"{self._call(ROUNDING_HELPER[step.rounding], bits)}({total}, {step.right_shift})"
        if step.residue is not None:
            lines.append(LineView(f"const int{step.accumulator_bits}_t quotient_{step.dest} = {quotient};"))
            quotient = f"quotient_{step.dest}"
            lines.append(LineView(f"{self._store(step.residue)} = {self._residue(step, total, quotient)};"))
        return [*lines, LineView(f"{self._store(step.dest)} = {self._narrowed(step, quotient)};")]

    def _product(self, term: Term, bits: int) -> tuple[str, bool]:
        """The product of a term without its sign, and whether it is subtracted.

        The range analysis bounds the magnitude of every factor and product, so neither sign can overflow.
        """
        word = self._read(term.word)
        if term.factor == 1:
            return word, False
        factors = [integer(abs(term.coefficient), bits)]
        if term.shift:
            factors.append(integer(1 << term.shift, bits))
        return " * ".join([*factors, word]), term.coefficient < 0

    def _residue(self, step: Sum, total: str, quotient: str) -> str:
        """What the shift dropped.

        The product is the sum rounded to a multiple of 2^right_shift, which the range analysis covers upwards; the
        lowest value of the type is such a multiple, so it can't overflow downwards either.
        """
        bits, residue = step.accumulator_bits, self.program.word(str(step.residue))
        value = f"{total} - {quotient} * {integer(1 << step.right_shift, bits)}"
        return f"({container(residue.bits)})({value})" if container_bits(residue.bits) < bits else value

    def _narrowed(self, step: Sum, value: str) -> str:
        """The quotient after clamp or overflow rule, in the type of its word; what a clamp holds does not overflow."""
        bits, dest = step.accumulator_bits, self.program.word(step.dest)
        saturated = step.dest in self.may_overflow and step.overflow is Overflow.SATURATE
        limits = (dest.lowest, dest.highest) if saturated else step.limits
        if limits is not None:
            value = f"{self._call('clamp', bits)}({value}, {integer(limits[0], bits)}, {integer(limits[1], bits)})"
        elif step.dest in self.may_overflow:
            value = f"{self._call('wrap', bits)}({value}, {integer(dest.highest, bits)})"
        return f"({container(dest.bits)}){value}" if container_bits(dest.bits) < bits else value

    def _call(self, kind: str, bits: int) -> str:
        self.called.add((kind, bits))
        return self.symbols(f"{kind}_{bits}")

    def _read(self, name: str) -> str:
        word = self.words[name]
        local = self.symbols.local(name)
        return f"state->{local}" if word.role is Role.STATE else local

    def _store(self, name: str) -> str:
        word = self.words[name]
        return self._read(name) if word.role is Role.STATE else f"const {container(word.bits)} {self._read(name)}"


def _term_comment(coefficients: tuple[Coefficient, ...], term: Term) -> str:
    found = next((c for c in coefficients if c.name == term.label), None)
    texts = ["" if found is None else _coefficient_comment(found), term.note]
    return "; ".join(text for text in texts if text)


def _coefficient_comment(coefficient: Coefficient) -> str:
    error = signed(coefficient.error_last_places)
    return (
        f"{coefficient.name} = {coefficient.exact}: {coefficient.integer} * 2^{-coefficient.fraction_bits},"
        f" off by {error} last places"
    )
