"""The self-test: stimuli, the outputs the simulator gives for them, and a longer run folded into a checksum."""

from attrs import frozen

from afterkick.emit.banner import selftest_banner
from afterkick.emit.promise import accepted_codes
from afterkick.emit.stimuli import LONG_RUN, PART, WORD, StimuliView, generated, loud_parts, rows, unsigned
from afterkick.emit.symbols import Symbols
from afterkick.emit.view import container
from afterkick.fixed.program import Program
from afterkick.fixed.ranges import Interval
from afterkick.fixed.simulate import preset_state, simulate, trace

__all__ = ["SelfTestView", "selftest_view"]

CHECK_FACTOR = 31
START_SAMPLES = 12
PER_LINE = 8


@frozen
class StartsView:
    """Presets, and the outputs that follow while the input stays."""

    count: int
    samples: int
    """Outputs that are compared after each preset."""
    input_rows: tuple[str, ...]
    wanted_rows: tuple[str, ...]
    expected_rows: tuple[str, ...]


@frozen
class SelfTestView(StimuliView):
    """What the self-test's template places."""

    data_type: str
    last: int
    """What the self-test returns where only the checksum is wrong."""
    unused_bits: int
    highest: int
    mask: str
    check_factor: int
    checksum: str
    starts: StartsView | None
    """None without a preset."""


def selftest_view(program: Program, symbols: Symbols) -> SelfTestView:
    """Stimuli and what must come out."""
    word = program.word(program.input)
    limits = accepted_codes(program)
    noise_bits = min(word.bits, (-limits.lowest).bit_length())
    parts = _parts(limits, noise_bits)
    inputs = [code for part in parts for code in part]
    expected = [int(code) for part in parts for code in simulate(program, part)]
    return SelfTestView(
        symbols=symbols,
        header_banner=selftest_banner(program, ".h"),
        source_banner=selftest_banner(program, ".c"),
        data_type=container(word.bits),
        samples=len(inputs),
        input_rows=_rows(inputs),
        expected_rows=_rows(expected),
        last=len(inputs) + LONG_RUN - 1,
        unused_bits=32 - noise_bits,
        highest=(1 << (noise_bits - 1)) - 1,
        mask=unsigned((1 << noise_bits) - 1),
        check_factor=CHECK_FACTOR,
        checksum=unsigned(_checksum(simulate(program, _noise(noise_bits, LONG_RUN)).tolist())),
        starts=None if program.preset is None else _starts(program, limits),
    )


def _starts(program: Program, limits: Interval) -> StartsView:
    """From rest, with the input and the wanted output small and large, of equal and of opposite signs."""
    lowest, highest = program.output_ends
    pairs = [(0, highest // 3), (1, 0), (limits.highest // 9, highest // 2)]
    pairs += [(limits.highest // 9, lowest // 2), (limits.lowest // 9, lowest // 5)]
    expected: list[int] = []
    for code, wanted in pairs:
        expected += trace(program, [code] * START_SAMPLES, preset_state(program, code, wanted)).outputs.tolist()
    codes, wishes = zip(*pairs, strict=True)
    return StartsView(len(pairs), START_SAMPLES, _rows(list(codes)), _rows(list(wishes)), _rows(expected))


def _parts(limits: Interval, noise_bits: int) -> list[list[int]]:
    """The loud ones, and noise of an eighth."""
    return [*loud_parts(limits.lowest, 0, limits.highest), [code >> 3 for code in _noise(noise_bits, PART)]]


def _noise(bits: int, count: int) -> list[int]:
    """Codes of that many bits, in two's complement."""
    return [code - (1 << bits) if code >> (bits - 1) else code for code in generated(bits, count)]


def _checksum(codes: list[int]) -> int:
    total = 0
    for code in codes:
        total = (total * CHECK_FACTOR + code) % WORD
    return total


def _rows(codes: list[int]) -> tuple[str, ...]:
    """Initialisers, eight a line.  The lowest 32-bit code has no literal of its own."""
    return rows([f"(-{-code - 1} - 1)" if code == -(1 << 31) else str(code) for code in codes], PER_LINE)
