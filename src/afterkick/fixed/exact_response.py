"""The pulse response of the exact sampled filter, in the terms of the absolute sums."""

from flint import arb, fmpq

from afterkick.fixed.modal_sums import ModalResponse
from afterkick.model.partial_fractions import Mode, modes_known
from afterkick.numbers import certified, is_exactly_zero
from afterkick.sampling.sampled import Sampled

__all__ = ["exact_response"]

FAINT = arb(2) ** -64


def exact_response(sampled: Sampled, scale: fmpq) -> ModalResponse:
    """The exact sampled filter times ``scale``, without its whole-sample delay."""
    poles = sampled.transfer().poles
    early = 1 + sum(is_exactly_zero(pole.value) for pole in poles)
    if any(abs(pole.value) < FAINT and not is_exactly_zero(pole.value) for pole in poles):
        # what is all but zero at once may have coefficients beyond any double: its first powers are taken one by one
        early += 1 + len(poles)

    def compute() -> tuple[tuple[arb, ...], tuple[Mode, ...]]:
        first = tuple(value * scale for value in sampled.first_samples(early))
        modes = sampled.pulse_modes()
        return first, tuple(Mode(m.pole, m.real, tuple(c * scale for c in m.coefficients)) for m in modes)

    return ModalResponse(*certified(compute, lambda found: modes_known(found[1]), "the exact pulse response"))
