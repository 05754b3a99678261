"""A sensor cable that breaks."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from humbell_sim.parts.base import Span


@dataclass(frozen=True, slots=True)
class BrokenCable:
    """
    From one moment on the converter gives the same number.

    Args:
        at_s: the moment, s from the start.
    """

    at_s: float

    def apply(self, signal: NDArray[np.float64], span: Span) -> NDArray[np.float64]:
        """See `Part`."""
        return np.where(span.time_s >= self.at_s, 0.0, signal)
