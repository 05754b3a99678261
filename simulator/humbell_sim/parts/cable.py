"""A sensor cable that breaks."""

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from humbell_sim.parts.base import CHUNK, Chunk


@dataclass(frozen=True, slots=True)
class BrokenCable:
    """
    From one moment on the converter gives the same number, 0.

    Args:
        at_s: the moment, s from the start.
    """

    at_s: float

    def apply(self, signal: NDArray[np.float64], chunk: Chunk) -> NDArray[np.float64]:
        """See `Part`."""
        whole = max(math.ceil(self.at_s * chunk.rate_hz) - chunk.first, 0)
        if whole >= CHUNK:
            return signal
        left = np.zeros(CHUNK)
        left[:whole] = signal[:whole]
        return left
