"""The pulse response of the exact sampled filter, in the terms of the absolute sums."""

from flint import arb, fmpq

from afterkick.fixed.modal_sums import ModalResponse
from afterkick.model.partial_fractions import Mode
from afterkick.numbers import certified, is_exactly_zero
from afterkick.sampling.sampled import Sampled

__all__ = ["exact_response"]


def exact_response(sampled: Sampled, scale: fmpq) -> ModalResponse:
    """The exact sampled filter times ``scale``, without its whole-sample delay."""
    early = 1 + sum(is_exactly_zero(pole.value) for pole in sampled.transfer().poles)

    def compute() -> tuple[tuple[arb, ...], tuple[Mode, ...]]:
        first = tuple(value * scale for value in sampled.first_samples(early))
        modes = sampled.pulse_modes()
        return first, tuple(Mode(m.pole, m.real, tuple(c * scale for c in m.coefficients)) for m in modes)

    def precise(found: tuple[tuple[arb, ...], tuple[Mode, ...]]) -> bool:
        return all(
            (m.pole.is_exact() or int(m.pole.rel_accuracy_bits()) >= 100)
            and all(int(c.rel_accuracy_bits()) >= 100 for c in m.coefficients)
            for m in found[1]
        )

    return ModalResponse(*certified(compute, precise, "the exact pulse response"))
