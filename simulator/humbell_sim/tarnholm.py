"""The invented Tarnholm Water works: what its sensors hear in the minute and a half of its story."""

import numpy as np
from numpy.typing import NDArray

from humbell_sim.parts import BearingDefect, BrokenCable, Noise, Order, Part, ShaftOrders, Span

RATE_HZ = 51_200.0
STORY_S = 90.0

_PUMP_HZ, _BLOWER_HZ = 1480 / 60, 2970 / 60


def channels(seed: int) -> tuple[tuple[Part, ...], ...]:
    """
    Return the parts of each channel.

    0: raw water pump 1, drive end: from 10 s on an outer race defect grows. 1: raw water pump 2, drive end: from the
    start a foot works loose. 2: aeration blower, non-drive end: after 60 s the sensor's cable breaks.
    """
    return (
        (
            ShaftOrders(_PUMP_HZ, [Order(1, 1.6), Order(2, 0.5, phase_deg=40)]),
            Noise(2.5, (seed, 0)),
            BearingDefect(3.585 * _PUMP_HZ, 4200.0, 0.0012, 10.0, 3.0, (seed, 10)),
        ),
        (
            ShaftOrders(
                _PUMP_HZ,
                [
                    Order(1, 1.9, 0.06),
                    Order(0.5, 0.0, 0.02, 80),
                    Order(1.5, 0.0, 0.03, 10),
                    Order(2, 0.5, 0.05, 120),
                    Order(3, 0.2, 0.03, 200),
                ],
            ),
            Noise(2.5, (seed, 1)),
        ),
        (
            ShaftOrders(_BLOWER_HZ, [Order(1, 2.4), Order(2, 0.8, phase_deg=15)]),
            Noise(4.0, (seed, 2)),
            BrokenCable(60.0),
        ),
    )


def render(seed: int, span: Span) -> NDArray[np.float32]:
    """Return the signal of all channels, (channels, n), g."""
    rows = []
    for parts in channels(seed):
        signal = np.zeros(span.length)
        for part in parts:
            signal = part.apply(signal, span)
        rows.append(signal / 9.80665)
    return np.asarray(rows, dtype=np.float32)
