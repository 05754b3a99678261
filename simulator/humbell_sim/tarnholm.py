"""The invented Tarnholm Water works: what its sensors hear in the minute and a half of its story."""

from humbell_sim.parts import BearingDefect, BrokenCable, Noise, Order, Part, ShaftOrders
from humbell_sim.rendering import Renderer

RATE_HZ = 51_200.0
STORY_S = 90.0
CHANNELS = 3

_PUMP_HZ, _BLOWER_HZ = 1480 / 60, 2970 / 60
_OUTER_RACE = 3.585  # impacts a turn of the pumps' bearings

_STEADY_PUMP = ShaftOrders(_PUMP_HZ, (Order(1, 1.6), Order(2, 0.5, phase_deg=40)))
_LOOSE_PUMP = ShaftOrders(
    _PUMP_HZ,
    (
        Order(1, 1.9, 0.06),
        Order(0.5, 0.0, 0.02, 80),
        Order(1.5, 0.0, 0.03, 10),
        Order(2, 0.5, 0.05, 120),
        Order(3, 0.2, 0.03, 200),
    ),
)
_BLOWER = ShaftOrders(_BLOWER_HZ, (Order(1, 2.4), Order(2, 0.8, phase_deg=15)))


def channels(seed: int, count: int = CHANNELS) -> tuple[tuple[Part, ...], ...]:
    """
    Return the parts of each channel.

    0: raw water pump 1, drive end: from 10 s on an outer race defect grows. 1: raw water pump 2, drive end: from the
    start a foot works loose. 2: aeration blower, non-drive end: after 60 s the sensor's cable breaks. From 3 on the
    same three come again, with noise and slip of their own.
    """
    return tuple(_STORIES[number % CHANNELS](seed, number) for number in range(count))


def renderer(seed: int, count: int = CHANNELS, rate_hz: float = RATE_HZ) -> Renderer:
    """Return what makes the samples of *count* channels."""
    return Renderer(channels(seed, count), rate_hz)


def _bearing(seed: int, number: int) -> tuple[Part, ...]:
    defect = BearingDefect(_OUTER_RACE * _PUMP_HZ, 4200.0, 0.0012, 10.0, 3.0, (seed, number, 1))
    return _STEADY_PUMP, Noise(2.5, (seed, number, 0)), defect


def _looseness(seed: int, number: int) -> tuple[Part, ...]:
    return _LOOSE_PUMP, Noise(2.5, (seed, number, 0))


def _cable(seed: int, number: int) -> tuple[Part, ...]:
    return _BLOWER, Noise(4.0, (seed, number, 0)), BrokenCable(60.0)


_STORIES = (_bearing, _looseness, _cable)
