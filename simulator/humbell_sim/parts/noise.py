"""Broadband noise of flow and machine."""

import numpy as np
from numpy.typing import NDArray

from humbell_sim.parts.base import Span

# Noise is drawn in chunks of so many samples, each from a generator of its own, so that any sample can be drawn alone.
_CHUNK = 4096


class Noise:
    """
    White Gaussian noise.

    Args:
        rms: m/s².

        seed: of this noise; the same seed gives the same samples.
    """

    def __init__(self, rms: float, seed: tuple[int, ...]) -> None:
        self._rms = rms
        self._seed = seed

    def apply(self, signal: NDArray[np.float64], span: Span) -> NDArray[np.float64]:
        """See `Part`."""
        first, last = span.first // _CHUNK, (span.first + span.length - 1) // _CHUNK
        chunks = [np.random.default_rng((*self._seed, k)).standard_normal(_CHUNK) for k in range(first, last + 1)]
        start = span.first - first * _CHUNK
        return signal + self._rms * np.concatenate(chunks)[start : start + span.length]
