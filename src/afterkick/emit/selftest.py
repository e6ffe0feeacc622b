"""The self-test: stimuli, the outputs the simulator gives for them, and a longer run folded into a checksum."""

from attrs import frozen

from afterkick.emit.banner import selftest_banner
from afterkick.emit.symbols import Symbols
from afterkick.emit.view import container
from afterkick.fixed.program import Program
from afterkick.fixed.ranges import Interval, analyse
from afterkick.fixed.simulate import simulate

__all__ = ["SelfTestView", "selftest_view"]

PART = 32
"""Samples of each stored stimulus; the filter is reset before each."""
LONG_RUN = 1024
BLOCK = 16
"""Samples that the long run hands to NAME_run at a time, in place."""
SEED = 1
MULTIPLIER = 1664525
INCREMENT = 1013904223
"""A full-period linear congruential generator modulo 2^32 (the parameters are common practice)."""
CHECK_FACTOR = 31
WORD = 1 << 32
PER_LINE = 8


@frozen
class SelfTestView:
    """What the self-test's template places."""

    symbols: Symbols
    header_banner: tuple[str, ...]
    source_banner: tuple[str, ...]
    data_type: str
    part: int
    samples: int
    input_rows: tuple[str, ...]
    expected_rows: tuple[str, ...]
    long_run: int
    long_blocks: int
    block: int
    last: int
    """What the self-test returns where only the checksum is wrong."""
    seed: str
    multiplier: str
    increment: str
    unused_bits: int
    highest: int
    mask: str
    check_factor: int
    checksum: str


def selftest_view(program: Program, symbols: Symbols) -> SelfTestView:
    """Stimuli and what must come out."""
    word = program.word(program.input)
    limits = analyse(program).proved.get(word.name, Interval.of_word(word.bits))
    noise_bits = min(word.bits, (-limits.lowest).bit_length())
    parts = _parts(limits, noise_bits)
    inputs = [code for part in parts for code in part]
    expected = [int(code) for part in parts for code in simulate(program, part)]
    return SelfTestView(
        symbols=symbols,
        header_banner=selftest_banner(program, ".h"),
        source_banner=selftest_banner(program, ".c"),
        data_type=container(word.bits),
        part=PART,
        samples=len(inputs),
        input_rows=_rows(inputs),
        expected_rows=_rows(expected),
        long_run=LONG_RUN,
        long_blocks=LONG_RUN // BLOCK,
        block=BLOCK,
        last=len(inputs) + LONG_RUN - 1,
        seed=_unsigned(SEED),
        multiplier=_unsigned(MULTIPLIER),
        increment=_unsigned(INCREMENT),
        unused_bits=32 - noise_bits,
        highest=(1 << (noise_bits - 1)) - 1,
        mask=_unsigned((1 << noise_bits) - 1),
        check_factor=CHECK_FACTOR,
        checksum=_unsigned(_checksum(simulate(program, _noise(noise_bits, LONG_RUN)).tolist())),
    )


def _parts(limits: Interval, noise_bits: int) -> list[list[int]]:
    """Impulse, step, full-scale alternation in blocks that excite slow sections too, and noise of an eighth."""
    highest, lowest = limits.highest, limits.lowest
    impulse = [highest] + [0] * (PART - 1)
    step = [lowest] * PART
    alternation = [highest if (n & 1) == 0 else lowest for n in range(PART // 2)]
    alternation += [highest if (n & 4) == 0 else lowest for n in range(PART // 2)]
    noise = [code >> 3 for code in _noise(noise_bits, PART)]
    return [impulse, step, alternation, noise]


def _noise(bits: int, count: int) -> list[int]:
    """Codes of that many bits, the highest of the generator."""
    codes, seed = [], SEED
    for _ in range(count):
        seed = (seed * MULTIPLIER + INCREMENT) % WORD
        code = seed >> (32 - bits)
        codes.append(code - (1 << bits) if code >> (bits - 1) else code)
    return codes


def _checksum(codes: list[int]) -> int:
    total = 0
    for code in codes:
        total = (total * CHECK_FACTOR + code) % WORD
    return total


def _unsigned(value: int) -> str:
    return f"UINT32_C({value})"


def _rows(codes: list[int]) -> tuple[str, ...]:
    """Initialisers, eight a line.  The lowest 32-bit code has no literal of its own."""
    texts = [f"(-{-code - 1} - 1)" if code == -(1 << 31) else str(code) for code in codes]
    return tuple(", ".join(texts[i : i + PER_LINE]) + "," for i in range(0, len(texts), PER_LINE))
