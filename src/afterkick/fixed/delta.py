"""The delta structure: a cascade of sections whose states hold differences.

With delta = (z - 1)/D a section of order 2 is

    w = b0 x + s1;  s1' = s1 + D (beta1 x - alpha1 w + s2);  s2' = s2 + D (beta2 x - alpha2 w);  y = w rounded
    alpha1 = (2 + a1)/D        beta1 = (b1 + 2 b0)/D
    alpha2 = (1 + a1 + a2)/D^2  beta2 = (b0 + b1 + b2)/D^2

and one of order 1 lacks s2, with alpha1 = (1 + a1)/D and beta1 = (b0 + b1)/D.  Near z = 1 these are the numbers that
count, so integers of a given length keep their accuracy however high the rate is.  D = 2^-k is no multiplication: it is
the weight of one last place of s2 against one of s1.  w is wide: it is fed back, and handed on to the next section,
before it is rounded.  The gain at z = 1 is beta2 : alpha2, which two integers can keep exactly.
"""

from typing import TYPE_CHECKING

from afterkick.errors import Refused
from afterkick.fixed.cascade import delay_problems, finished, scaled, unsupported
from afterkick.fixed.delta_core import delta_core
from afterkick.fixed.program import Program
from afterkick.fixed.quantise import exact_sections
from afterkick.fixed.wide import wide_cascade

if TYPE_CHECKING:
    from afterkick.design.schema import Arithmetic, Signals
    from afterkick.sampling.sampled import Sampled

__all__ = ["delta_program"]


def delta_program(
    sampled: "Sampled", arithmetic: "Arithmetic", signals: "Signals", name: str, *, title: str = "", digest: str = ""
) -> Program:
    """The integer filter that realises H * (input full scale / output full scale) as a delta-operator cascade.

    :raises Refused: with all problems of all sections: a coefficient that lost its meaning, words or sums that are too
        narrow, a delay that is too long, or an option that this structure doesn't know.
    """
    problems = unsupported(arithmetic) + delay_problems(sampled.delay_samples)
    if problems:
        raise Refused(problems)
    sections, exponents = scaled(exact_sections(sampled), arithmetic.scaling, signals)
    peak = signals.input.peak_or_full_scale / signals.input.full_scale
    wired = wide_cascade(delta_core, sections, exponents, arithmetic, peak, sampled.delay_samples)
    return finished(wired, "delta", sampled, arithmetic, signals, name, title=title, digest=digest)
