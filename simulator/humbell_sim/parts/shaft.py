"""Vibration at multiples of shaft speed: unbalance, misalignment, looseness."""

import math
from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from humbell_sim.parts.base import CHUNK, Chunk

_STEPS = np.arange(CHUNK, dtype=np.float64)
_WAVES = 128  # in memory, 64 KiB each: more lines than any story has


@dataclass(frozen=True, slots=True)
class Order:
    """
    One line at a multiple of shaft speed.

    Args:
        multiple: of shaft speed; halves belong to looseness.

        velocity_mm_s: RMS at the start.

        growth_mm_s_per_s: by which it grows each second; it never falls below 0.

        phase_deg: at the start.
    """

    multiple: float
    velocity_mm_s: float
    growth_mm_s_per_s: float = 0.0
    phase_deg: float = 0.0


@dataclass(frozen=True, slots=True)
class ShaftOrders:
    """
    A sum of lines at multiples of a constant shaft speed.

    a(t) = sqrt(2) 2 pi f v cos(2 pi f t + phase): the acceleration of a sine of velocity v RMS; common practice. Lines
    above half the rate fold, as with a converter without a filter.

    Args:
        shaft_hz: turns a second.

        orders: the lines.
    """

    shaft_hz: float
    orders: tuple[Order, ...]

    def apply(self, signal: NDArray[np.float64], chunk: Chunk) -> NDArray[np.float64]:
        """See `Part`."""
        total = signal.copy()
        for order in self.orders:
            total += self._line(order, chunk)
        return total

    def _line(self, order: Order, chunk: Chunk) -> NDArray[np.float64]:
        line_hz = order.multiple * self.shaft_hz
        peak_of_rms = math.sqrt(2) * 2 * math.pi * line_hz / 1000
        phase = 2 * math.pi * math.fmod(line_hz * chunk.start_s, 1.0) + math.radians(order.phase_deg)
        cosine, sine = _wave(line_hz / chunk.rate_hz)
        if not order.growth_mm_s_per_s:
            peak = peak_of_rms * max(order.velocity_mm_s, 0.0)
            return peak * math.cos(phase) * cosine - peak * math.sin(phase) * sine
        start = order.velocity_mm_s + order.growth_mm_s_per_s * chunk.start_s
        velocity = np.maximum(start + order.growth_mm_s_per_s / chunk.rate_hz * _STEPS, 0.0)
        line: NDArray[np.float64] = math.cos(phase) * cosine - math.sin(phase) * sine
        return line * (peak_of_rms * velocity)


@lru_cache(maxsize=_WAVES)
def _wave(turns: float) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """
    Return cosine and sine, (CHUNK,), of an angle that advances by *turns* of a circle each sample.

    cos(a + b) = cos a cos b - sin a sin b then gives the line at any phase without a cosine for every sample.
    """
    angle = 2 * np.pi * turns * _STEPS
    return np.cos(angle), np.sin(angle)
