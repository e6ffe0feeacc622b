"""By what factor the coefficient search lowers the impulse error of random 16-bit direct designs.

    python tests/figures/coefficient_search.py

100 low-passes from a seed: five families, orders 2 to 8, 10 to 300 samples per corner period, four sampling methods;
those that 16 bits refuse are left out.  "nearest" has every coefficient rounded to the nearest integer at the finest
binary points, "searched" is what ships, with the DC gain kept exactly where the filter has a rational one.  Errors are
max |h_q - h_d| relative to the peak, over all samples until the response has faded, in ball arithmetic.
"""

import random
import statistics
import sys
import time
from collections.abc import Iterator

from attrs import frozen
from flint import arb, fmpq

from afterkick.design.schema import Arithmetic, Lowpass, Sampling, Signals
from afterkick.errors import Refused
from afterkick.fixed import Program, direct_program, quantised_dc_gain
from afterkick.fixed.kept import exact_dc_gain
from afterkick.fixed.realised import realised
from afterkick.model.blocks import block_factors
from afterkick.model.model import build
from afterkick.numbers import working_bits
from afterkick.sampling import Sampled, sample

DESIGNS = 100
LEAST_FACTOR = 2.0
METHODS = ("bilinear", "zero-order-hold", "first-order-hold", "matched")
BITS = 256
FADED = 1e-7


@frozen
class Row:
    name: str
    nearest: float
    searched: float
    seconds: float
    exact: bool | None
    """Whether the DC gain is met exactly; None where it is not rational."""

    @property
    def factor(self) -> float:
        return self.nearest / self.searched


def low_pass(seed: int) -> tuple[Lowpass, fmpq, str]:
    """A block with its corner at 1 Hz, the sampling rate and the method."""
    draw = random.Random(seed)
    family = draw.choice(("butterworth", "bessel", "chebyshev", "inverse-chebyshev", "elliptic"))
    order = draw.randint(2, 8)
    options = {}
    if family in ("chebyshev", "elliptic"):
        options["ripple_db"] = fmpq(draw.choice((1, 5, 10)), 10)
    if family in ("inverse-chebyshev", "elliptic"):
        options["stop_db"] = fmpq(draw.choice((40, 60)))
    rate_hz = fmpq(round(1000 * 30 ** draw.random()), 100)
    return Lowpass(family=family, order=order, corner_hz=fmpq(1), **options), rate_hz, draw.choice(METHODS)


def pulse_until_faded(filtered: Sampled) -> list[arb]:
    """The exact response up to the power of two of samples from which on nothing is left of it."""
    samples = 64
    while True:
        values = filtered.pulse(range(2 * samples))
        late = max(abs(value).mid() for value in values[samples:])
        if late <= FADED * max(abs(value).mid() for value in values):
            return values
        samples *= 2


def error(program: Program, filtered: Sampled, exact: list[arb]) -> float:
    """max |h_q - h_d| / max |h_d|."""
    found = realised(program, filtered).pulse(range(len(exact)))
    distance = max(abs(a - b).mid() for a, b in zip(found, exact, strict=True))
    return float(distance / max(abs(value).mid() for value in exact))


def judged(seed: int) -> Row:
    """One design.

    :raises Refused: where 16 bits don't do.
    """
    block, rate_hz, method = low_pass(seed)
    filtered = sample(build(block_factors(block)), Sampling(rate_hz, method))
    nearest = direct_program(filtered, Arithmetic(), Signals(), "nearest", search=False)
    start = time.process_time()
    searched = direct_program(filtered, Arithmetic(), Signals(), "searched")
    seconds = time.process_time() - start
    with working_bits(BITS):
        exact = pulse_until_faded(filtered)
        errors = [error(program, filtered, exact) for program in (nearest, searched)]
    gain = exact_dc_gain(filtered)
    name = f"{seed:>3} {block.family:<17} {block.order} {float(rate_hz.p) / float(rate_hz.q):>6.1f} {method:<16}"
    return Row(name, *errors, seconds, None if gain is None else quantised_dc_gain(searched) == gain)


def rows(count: int) -> Iterator[Row]:
    """The first ``count`` designs that are not refused."""
    seed = 0
    while count:
        try:
            row = judged(seed)
        except Refused:
            pass
        else:
            count -= 1
            yield row
        seed += 1


def main() -> int:
    print(
        f"{'seed family':<19} order   rate {'method':<16} {'nearest':>8} {'searched':>8} {'factor':>7} {'ms':>4}  gain"
    )
    found = []
    for row in rows(DESIGNS):
        found.append(row)
        kept = {True: "exact", False: "NOT EXACT", None: "irrational"}[row.exact]
        print(
            f"{row.name} {row.nearest:>8.1e} {row.searched:>8.1e} {row.factor:>7.2f} {1e3 * row.seconds:>4.0f}  {kept}",
            flush=True,
        )
    factors = [row.factor for row in found]
    quartiles = statistics.quantiles(factors, n=4, method="inclusive")
    seconds = [row.seconds for row in found]
    exact = [row.exact for row in found]
    print(f"factor: median {quartiles[1]:.2f}, quartiles {quartiles[0]:.2f} and {quartiles[2]:.2f}, ", end="")
    print(f"worst {min(factors):.2f}, best {max(factors):.0f}; limit of the median {LEAST_FACTOR}")
    print(
        f"time of direct_program: median {1e3 * statistics.median(seconds):.0f} ms, worst {1e3 * max(seconds):.0f} ms"
    )
    print(f"DC gain exact in {exact.count(True)} of {len(exact) - exact.count(None)} designs that have a rational one")
    return 0 if quartiles[1] >= LEAST_FACTOR and False not in exact else 1


if __name__ == "__main__":
    sys.exit(main())
