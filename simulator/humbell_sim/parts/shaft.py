"""Vibration at multiples of shaft speed: unbalance, misalignment, looseness."""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from humbell_sim.parts.base import Span


@dataclass(frozen=True, slots=True)
class Order:
    """
    One line at a multiple of shaft speed.

    Args:
        multiple: of shaft speed; halves belong to looseness.

        velocity_mm_s: RMS at the start.

        growth_mm_s_per_s: by which it grows each second.

        phase_deg: at the start.
    """

    multiple: float
    velocity_mm_s: float
    growth_mm_s_per_s: float = 0.0
    phase_deg: float = 0.0


class ShaftOrders:
    """
    A sum of lines at multiples of a constant shaft speed.

    a(t) = sqrt(2) 2 pi f v cos(2 pi f t + phase): the acceleration of a sine of velocity v RMS; common practice.

    Args:
        shaft_hz: turns a second.

        orders: the lines.
    """

    def __init__(self, shaft_hz: float, orders: Sequence[Order]) -> None:
        self._shaft_hz = shaft_hz
        self._orders = tuple(orders)

    def apply(self, signal: NDArray[np.float64], span: Span) -> NDArray[np.float64]:
        """See `Part`."""
        time_s = span.time_s
        total = signal.copy()
        for order in self._orders:
            w = 2 * np.pi * order.multiple * self._shaft_hz
            velocity = np.maximum(order.velocity_mm_s + order.growth_mm_s_per_s * time_s, 0) / 1000
            total += np.sqrt(2) * w * velocity * np.cos(w * time_s + np.deg2rad(order.phase_deg))
        return total
