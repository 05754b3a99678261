"""Builds the signals, blocks and points that the tests of the measures share."""

from collections.abc import Iterator, Sequence
from itertools import pairwise

import numpy as np
from hypothesis import strategies as st
from numpy.typing import NDArray

from humbell.measures import Band, BandPlan, Bank, PointPlan, Quantity, highest_edge_hz
from humbell.model import Block, Measure, PointId, Quality, Reading, Samples, SampleUnit

START_NS = 1_772_359_200_000_000_000  # 2026-03-01T10:00:00Z

# What converters run at, and two odd rates: a divided crystal's and one that fits nothing.
RATES_HZ = (2560.0, 6400.0, 12800.0, 20000.0, 25600.0, 48000.0, 51200.0, 102400.0, 48828.125, 11111.1)

VELOCITY = Band(Quantity.VELOCITY, 10.0, 1000.0)
SLOW_VELOCITY = Band(Quantity.VELOCITY, 2.0, 1000.0)


def acceleration(rate_hz: float) -> Band:
    """Return the acceleration band from 500 Hz to 16 kHz, or as far as *rate_hz* carries it."""
    return Band(Quantity.ACCELERATION, 500.0, min(16000.0, highest_edge_hz(rate_hz)))


def times(rate_hz: float, seconds: float) -> NDArray[np.float64]:
    """Return the moments of the samples, (n,), s."""
    return np.arange(round(rate_hz * seconds)) / rate_hz


def sine(rate_hz: float, seconds: float, frequency_hz: float, rms: float = 1.0, phase: float = 0.0) -> Samples:
    """Return a sine, (n,)."""
    wave: Samples = rms * np.sqrt(2) * np.sin(2 * np.pi * frequency_hz * times(rate_hz, seconds) + phase)
    return wave


def vibration(rate_hz: float, seconds: float, frequency_hz: float, velocity_mm_s: float) -> NDArray[np.float64]:
    """Return the acceleration (n,), m/s², of a vibration of so many mm/s RMS at one frequency: a = 2 pi f v."""
    return np.asarray(sine(rate_hz, seconds, frequency_hz, 2 * np.pi * frequency_hz * velocity_mm_s / 1000))


def noise(seed: int, *shape: int) -> NDArray[np.float64]:
    """Return Gaussian noise of RMS 1, the same for the same seed."""
    return np.random.default_rng(seed).standard_normal(shape)


def cuts(length: int) -> st.SearchStrategy[list[int]]:
    """Draw places at which a signal of *length* samples is cut, in order, its ends not among them."""
    return st.sets(st.integers(1, length - 1), max_size=12).map(sorted)


def parts(samples: Samples, places: Sequence[int]) -> Iterator[Samples]:
    """Yield the parts of *samples* (channels, n) between the places."""
    for first, last in pairwise([0, *places, samples.shape[1]]):
        yield samples[:, first:last]


def point(channel: int, *bands: Band, frame_s: float = 1.0, gain: float = 1.0) -> PointPlan:
    """Return the plan of point ``m/<channel>``, with frames of one length."""
    return PointPlan(PointId("m", str(channel)), channel, gain, tuple(BandPlan(band, frame_s) for band in bands))


def block(samples: Samples, rate_hz: float, start_ns: int = START_NS, *, piece: bool = False) -> Block:
    """Return one block of *samples* (channels, n) in m/s²."""
    return Block("src", "boot", 0, start_ns, rate_hz, SampleUnit.METRES_PER_SECOND_SQUARED, samples, piece)


def measure(
    bank: Bank,
    samples: Samples,
    rate_hz: float,
    places: Sequence[int] | None = None,
    *,
    start_ns: int = START_NS,
    end: bool = True,
) -> list[Reading]:
    """
    Return the readings of a stream.

    Args:
        bank: measures it.

        samples: (channels, n), m/s².

        rate_hz: samples a second.

        places: where it is cut into blocks; default: every quarter second.

        start_ns: UTC of the first sample.

        end: the stream ends with it, and nothing is lost behind.
    """
    length = samples.shape[1]
    at = 0
    readings: list[Reading] = []
    for part in parts(samples, places or range(round(rate_hz / 4), length, round(rate_hz / 4))):
        readings += bank.feed(block(part, rate_hz, start_ns + round(at * 1e9 / rate_hz)))
        at += part.shape[1]
    return readings + bank.reset(0, start_ns + round(length * 1e9 / rate_hz)) if end else readings


def select(readings: Sequence[Reading], channel: int, measured: Measure) -> list[Reading]:
    """Return the readings of one measure of one channel."""
    return [r for r in readings if r.point == str(channel) and r.measure is measured]


def good(readings: Sequence[Reading], channel: int, measured: Measure) -> NDArray[np.float64]:
    """Return the good values of one measure of one channel, (n,), of which there must be some."""
    values = np.array([r.value for r in select(readings, channel, measured) if r.quality is Quality.GOOD])
    assert values.size, f"no reading of {measured} is good"
    return values
