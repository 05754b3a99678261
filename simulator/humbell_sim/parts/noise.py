"""Broadband noise of flow and machine."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from humbell_sim.parts.base import CHUNK, Chunk


@dataclass(frozen=True, slots=True)
class Noise:
    """
    White Gaussian noise.

    Args:
        rms: m/s².

        seed: of this noise; the same seed gives the same samples.
    """

    rms: float
    seed: tuple[int, ...]

    def apply(self, signal: NDArray[np.float64], chunk: Chunk) -> NDArray[np.float64]:
        """See `Part`."""
        # Each chunk has a generator of its own, so that any can be drawn alone.
        generator = np.random.default_rng((*self.seed, chunk.number))
        noise = generator.standard_normal(CHUNK, dtype=np.float32)
        noise *= np.float32(self.rms)
        return signal + noise
