"""The contract of every part."""

from dataclasses import dataclass
from typing import Protocol

import numpy as np
from numpy.typing import NDArray


@dataclass(frozen=True, slots=True)
class Span:
    """
    Consecutive samples.

    Args:
        first: number of the first one, from 0.

        length: how many.

        rate_hz: samples a second.
    """

    first: int
    length: int
    rate_hz: float

    @property
    def time_s(self) -> NDArray[np.float64]:
        """Times of the samples, (length,), s from the start."""
        return (self.first + np.arange(self.length)) / self.rate_hz


class Part(Protocol):
    """One cause of vibration, or of its loss."""

    def apply(self, signal: NDArray[np.float64], span: Span) -> NDArray[np.float64]:
        """Return *signal* (length,), m/s², of *span* with this part in it; *signal* itself stays as it is."""
        ...
