"""The contract of every part."""

from dataclasses import dataclass
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

# Signals are computed in whole chunks of so many samples and cut afterwards. Whatever the cut, each sample comes out of
# the same operations, so it is the same to the last bit. At 51.2 kHz 80 ms; a chunk of float64 stays in the cache.
CHUNK = 4096


@dataclass(frozen=True, slots=True)
class Chunk:
    """
    Names the consecutive samples from *number* × `CHUNK` on, `CHUNK` of them.

    Args:
        number: from 0.

        rate_hz: samples a second.
    """

    number: int
    rate_hz: float

    @property
    def first(self) -> int:
        """Number of the first sample, from 0."""
        return self.number * CHUNK

    @property
    def start_s(self) -> float:
        """Time of the first sample, s from the start."""
        return self.first / self.rate_hz


class Part(Protocol):
    """One cause of vibration, or of its loss."""

    def apply(self, signal: NDArray[np.float64], chunk: Chunk) -> NDArray[np.float64]:
        """Return *signal* (CHUNK,), m/s², of *chunk* with this part in it; *signal* itself stays as it is."""
        ...
