"""Model -> Sampled: the six sampling methods."""

from afterkick.sampling.sample import sample
from afterkick.sampling.sampled import Sampled, Section

__all__ = ["Sampled", "Section", "sample"]
