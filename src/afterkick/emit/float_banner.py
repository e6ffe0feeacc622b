"""The comment at the top of the header of a filter in single precision."""

from collections.abc import Iterator, Sequence

from afterkick.emit.banner import CAUTIONS, filter_lines, first_lines, listed, quantity
from afterkick.emit.float_literals import single
from afterkick.emit.text import comment_lines
from afterkick.floating.program import FloatProgram, FloatProgramSection, float_dc_gain

__all__ = ["float_header_banner"]

FLOAT_CAUTIONS = (
    "A NaN or an infinity at the input stays in the memory until the next reset: test the input where one can occur.",
    *CAUTIONS,
)


def float_header_banner(program: FloatProgram, notes: tuple[str, ...]) -> tuple[str, ...]:
    """Lines for NAME.h: the whole story."""
    return (
        *first_lines(program, ".h", program.title),
        *_filter(program),
        *_arithmetic(program),
        *_signals(program),
        *listed("Accuracy", notes),
        *listed("Cautions", FLOAT_CAUTIONS),
    )


def _filter(program: FloatProgram) -> Iterator[str]:
    structure = "in cascade, single precision, transposed direct form II"
    transfers = [_transfer(section) for section in program.sections]
    return filter_lines(program, structure, transfers, float_dc_gain(program), "coefficients")


def _transfer(section: FloatProgramSection) -> str:
    top, bottom = _polynomial(section.b), _polynomial(section.a)
    return f"({top}) / ({bottom})" if section.a[1] or section.a[2] else top


def _polynomial(coefficients: Sequence[float]) -> str:
    text = ""
    for value, power in zip(coefficients, ("", " z^-1", " z^-2"), strict=True):
        if value:
            sign = ("-" if value < 0 else "") if not text else (" - " if value < 0 else " + ")
            text += f"{sign}{single(abs(value)).removesuffix('f')}{power}"
    return text


def _arithmetic(program: FloatProgram) -> Iterator[str]:
    yield ""
    yield "Each section of input x and output y, with states s1 and s2:"
    yield "  y = b0 x + s1;  s1 = s2 - a1 y + b1 x;  s2 = b2 x - a2 y"
    yield from comment_lines(
        "Every product and every sum of two numbers rounds to the nearest float. Results are those of the analysis, "
        "bit for bit, where the compiler neither fuses a product with a sum (-ffp-contract=off or its like) nor holds "
        "floats wider than they are (FLT_EVAL_METHOD is 0). Elsewhere they differ in the last places; the self-test "
        "tells which it is."
    )
    if program.flush_below is not None:
        yield from comment_lines(
            f"A section whose states are all below {single(program.flush_below)} in magnitude is set to zero: numbers "
            "below 2^-126 (subnormals) are slow on some cores."
        )


def _signals(program: FloatProgram) -> Iterator[str]:
    yield ""
    source = program.input_format
    yield from comment_lines(
        f"Input: in {source.unit or '1'}, promised to stay within {quantity(source.peak, source.unit)}."
    )
    yield from comment_lines(f"Output: in {program.output_format.unit or '1'}.")
