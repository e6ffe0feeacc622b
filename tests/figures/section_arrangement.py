"""What the search for pairing and order of sections does to the rounding noise of random direct designs.

    python tests/figures/section_arrangement.py

100 filters of two to eight sections from a seed: low-, high- and band-passes and band-stops of five families, 8 to 400
samples per corner period, four sampling methods; 16-bit data, 32-bit coefficients rounded to the nearest, so that the
scaling and the roundings alone differ.  For each norm of the scaling: the noise of the programs in output counts r.m.s.
(the estimate of the bounds, from their exact linear responses), by the rule and as searched, their ratio, how far the
search's own estimate is from it, and how many programs are proved never to overflow.  Ends with 1 if a median is not
lowered, or if a searched program is noisier than that of the rule.
"""

import random
import statistics
import sys
import time
from collections.abc import Iterator

from attrs import frozen
from flint import fmpq

from afterkick.design.schema import Arithmetic, Bandpass, Bandstop, Block, Highpass, Lowpass, Sampling, Signal, Signals
from afterkick.errors import Refused, Uncertified
from afterkick.fixed.arrangement import arranged
from afterkick.fixed.direct import direct_program
from afterkick.fixed.worst_case import WorstCase
from afterkick.model.blocks import block_factors
from afterkick.model.model import build
from afterkick.numbers import nearest_float
from afterkick.sampling import Sampled, sample

DESIGNS = 100
NORMS = ("peak-gain", "two-norm", "infinity")
METHODS = ("bilinear", "zero-order-hold", "first-order-hold", "matched")
SIGNALS = Signals(Signal("V", fmpq(1), fmpq(3, 4)), Signal("V", fmpq(2)))


@frozen
class Row:
    """One filter under one norm."""

    by_rule: float
    searched: float
    estimated: float
    """Of the searched one."""
    proved_by_rule: bool
    proved: bool
    seconds: float


def filters() -> Iterator[tuple[str, Sampled]]:
    """An endless list, with names."""
    seed = 0
    while True:
        draw = random.Random(seed)
        family = draw.choice(("butterworth", "bessel", "chebyshev", "inverse-chebyshev", "elliptic"))
        options = {}
        if family in ("chebyshev", "elliptic"):
            options["ripple_db"] = fmpq(draw.choice((1, 5, 10)), 10)
        if family in ("inverse-chebyshev", "elliptic"):
            options["stop_db"] = fmpq(draw.choice((40, 60)))
        kind = draw.choice((Lowpass, Lowpass, Highpass, Bandpass, Bandstop))
        rate_hz = fmpq(round(800 * 50 ** draw.random()), 100)
        method = draw.choice(METHODS)
        block: Block
        if kind in (Lowpass, Highpass):
            block = kind(family=family, order=draw.randint(3, 16), corner_hz=fmpq(1), **options)
        else:
            width = 1 + fmpq(draw.randint(1, 10), 10)
            block = kind(family=family, order=draw.randint(2, 8), low_hz=1 / width, high_hz=width, **options)
        try:
            filtered = sample(build(block_factors(block)), Sampling(rate_hz, method))
            filtered.sections(128)
        except (Refused, Uncertified):
            pass
        else:
            rate = f"{nearest_float(rate_hz):>6.1f}"
            yield f"{seed:>3} {kind.__name__:<9} {family:<17} {block.order:>2} {rate} {method:<16}", filtered
        seed += 1


def judged(filtered: Sampled, norm: str) -> Row:
    """One filter.

    :raises Refused: where there is no program.
    """
    arithmetic = Arithmetic(coefficient_bits=32, scaling=norm)
    filtered.sections(128)
    start = time.process_time()
    found = arranged(filtered, arithmetic, SIGNALS)
    seconds = time.process_time() - start
    worst = WorstCase(direct_program(filtered, arithmetic, SIGNALS, "rule", search=False))
    by_rule, proved = worst.noise_rms, all(word.fits for word in worst.ranges)
    assert by_rule is not None
    if found is None:
        return Row(by_rule, by_rule, by_rule, proved, proved, seconds)
    worst = WorstCase(direct_program(found.sampled, arithmetic, SIGNALS, "searched", search=False))
    assert worst.noise_rms is not None
    return Row(by_rule, worst.noise_rms, found.noise, proved, all(word.fits for word in worst.ranges), seconds)


def quartiles(values: list[float]) -> str:
    """Median (lower and upper quartile)."""
    low, middle, high = statistics.quantiles(values, n=4, method="inclusive")
    return f"{middle:.3g} ({low:.3g} to {high:.3g})"


def main() -> int:
    found: dict[str, list[Row]] = {norm: [] for norm in NORMS}
    refused = 0
    for name, filtered in filters():
        if len(found[NORMS[0]]) == DESIGNS:
            break
        try:
            rows = [judged(filtered, norm) for norm in NORMS]
        except Refused:
            refused += 1
            continue
        print(name, *(f"{row.by_rule:>9.3g} {row.searched:>9.3g}" for row in rows), flush=True)
        for norm, row in zip(NORMS, rows, strict=True):
            found[norm].append(row)
    print(f"\n{DESIGNS} designs; {refused} more were refused")
    wrong = False
    for norm, rows in found.items():
        ratios = [row.searched / row.by_rule for row in rows]
        off = max(abs(row.estimated / row.searched - 1) for row in rows)
        wrong |= max(ratios) > 1 or statistics.median(ratios) >= 1
        print(f"{norm}\n  by the rule {quartiles([row.by_rule for row in rows])} counts r.m.s.")
        print(f"  searched    {quartiles([row.searched for row in rows])} counts r.m.s.")
        print(f"  ratio       {quartiles(ratios)}, least {min(ratios):.3g}, largest {max(ratios):.3g}")
        print(f"  the search's own estimate is off by at most {100 * off:.2g} %")
        counts = [sum(row.proved_by_rule for row in rows), sum(row.proved for row in rows)]
        lost = sum(row.proved_by_rule and not row.proved for row in rows)
        print(f"  proved never to overflow: {counts[0]} by the rule, {counts[1]} searched; {lost} no longer")
        print(f"  time of the search {quartiles([1e3 * row.seconds for row in rows])} ms, ", end="")
        print(f"worst {1e3 * max(row.seconds for row in rows):.0f} ms")
    return int(wrong)


if __name__ == "__main__":
    sys.exit(main())
