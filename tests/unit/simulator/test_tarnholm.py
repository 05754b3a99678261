"""The story's facts: which channel does what, and when. Told from the samples alone, without any of our measures."""

import numpy as np
import pytest
from numpy.typing import NDArray

from humbell.model import STANDARD_GRAVITY
from humbell_sim.parts import ShaftOrders
from humbell_sim.rendering import Renderer
from humbell_sim.tarnholm import RATE_HZ, channels, renderer

PUMP_HZ, BLOWER_HZ = 1480 / 60, 2970 / 60
OUTER_RACE_HZ = 3.585 * PUMP_HZ


def second(channel: int, start_s: float, count: int = 3, seed: int = 1) -> NDArray[np.float64]:
    """Return one second of a channel, g."""
    rows = renderer(seed, count).render(round(start_s * RATE_HZ), round(RATE_HZ))
    return np.asarray(rows[channel], dtype=np.float64)


def band_rms(signal: NDArray[np.float64], low_hz: float, high_hz: float) -> float:
    """Return the RMS in a band, by Parseval's theorem."""
    lines = np.fft.rfft(signal)[round(low_hz) : round(high_hz)] / len(signal)
    return float(np.sqrt(2 * np.sum(np.abs(lines) ** 2)))


def line_mm_s(channel: int, start_s: float, line_hz: float, count: int = 3) -> float:
    """
    Return the RMS velocity of one line of the shaft alone over 3 s, mm/s.

    v = a / (2 pi f) of the component found by a Hann window. Noise would drown the weakest lines.
    """
    parts = [part for part in channels(1, count)[channel] if isinstance(part, ShaftOrders)]
    rows = Renderer([parts], RATE_HZ).render(round(start_s * RATE_HZ), round(3 * RATE_HZ))
    signal = rows[0].astype(np.float64)
    window = np.hanning(len(signal))
    turning = np.exp(-2j * np.pi * line_hz * np.arange(len(signal)) / RATE_HZ)
    peak = 2 * np.abs(np.sum(signal * window * turning)) / window.sum()
    return float(peak * STANDARD_GRAVITY / np.sqrt(2) / (2 * np.pi * line_hz) * 1000)


def impact_strength(signal: NDArray[np.float64], rate_hz: float) -> float:
    """Return how far the line of the envelope of 3 to 5.5 kHz at *rate_hz* stands above its surroundings."""
    spectrum = np.fft.fft(signal)
    frequency_hz = np.fft.fftfreq(len(signal), 1 / RATE_HZ)
    spectrum[(frequency_hz < 3000) | (frequency_hz > 5500)] = 0
    envelope = np.abs(np.fft.ifft(spectrum))
    lines = np.abs(np.fft.rfft((envelope - envelope.mean()) * np.hanning(len(envelope))))
    near = round(rate_hz)
    return float(lines[near - 1 : near + 2].max() / np.median(lines[near - 30 : near + 30]))


def test_pump_1_hears_an_outer_race_defect_from_ten_seconds_on() -> None:
    """Channel 0: no impacts before 10 s, then at 3.585 times the speed; 2 g RMS are passed near 50 s, 4 g never."""
    assert impact_strength(second(0, 5.0), OUTER_RACE_HZ) < 5
    for start_s in (20.0, 50.0, 80.0):
        assert impact_strength(second(0, start_s), OUTER_RACE_HZ) > 20
    level = {start_s: band_rms(second(0, start_s), 500, 16_000) for start_s in (5.0, 45.0, 60.0, 89.0)}
    assert level[5.0] < 0.3 < level[45.0] < 2.0 < level[60.0] < level[89.0] < 4.0


def test_pump_1_stays_as_smooth_as_it_was_at_its_speed() -> None:
    """Channel 0: 1.6 mm/s RMS at the speed, before the defect and with it."""
    for start_s in (2.0, 80.0):
        assert line_mm_s(0, start_s, PUMP_HZ) == pytest.approx(1.6, rel=0.01)


@pytest.mark.parametrize(
    ("multiple", "start", "growth"), [(1, 1.9, 0.06), (0.5, 0, 0.02), (1.5, 0, 0.03), (2, 0.5, 0.05), (3, 0.2, 0.03)]
)
def test_pump_2_works_loose(multiple: float, start: float, growth: float) -> None:
    """Channel 1: the orders, halves among them, grow from the start on."""
    for start_s in (0.0, 40.0, 80.0):
        expected = start + growth * (start_s + 1.5)
        assert line_mm_s(1, start_s, multiple * PUMP_HZ) == pytest.approx(expected, rel=0.01)


def test_pump_2_passes_both_velocity_limits() -> None:
    """Channel 1: the root of the sum of its orders' squares is below 4.5 mm/s at first, and above 7.1 in the end."""
    at = {
        start_s: np.sqrt(sum(line_mm_s(1, start_s, multiple * PUMP_HZ) ** 2 for multiple in (0.5, 1, 1.5, 2, 3)))
        for start_s in (0.0, 35.0, 65.0, 85.0)
    }
    assert at[0.0] < 4.5 < at[35.0] < 7.1 < at[65.0] < at[85.0]
    assert impact_strength(second(1, 80.0), OUTER_RACE_HZ) < 5


def test_the_blower_runs_steadily_until_its_cable_breaks() -> None:
    """Channel 2: 2.4 mm/s RMS at 2970 r/min; from 60 s on every sample is the same."""
    for start_s in (0.0, 56.0):
        assert line_mm_s(2, start_s, BLOWER_HZ) == pytest.approx(2.4, rel=0.01)
    assert np.ptp(second(2, 59.0)) > 0.5
    for start_s in (60.0, 89.0, 1000.0):
        assert np.ptp(second(2, start_s)) == 0


def test_more_channels_play_the_same_parts_with_other_noise() -> None:
    """Channel i beyond the third does what channel i - 3 does, but no two signals are alike; the first three stay."""
    count = 7
    assert len(channels(1, 64)) == 64
    for channel in range(3):
        np.testing.assert_array_equal(second(channel, 30.0, count), second(channel, 30.0))
    assert line_mm_s(3, 2.0, PUMP_HZ, count) == pytest.approx(1.6, rel=0.01)
    assert impact_strength(second(6, 50.0, count), OUTER_RACE_HZ) > 20
    assert line_mm_s(4, 80.0, PUMP_HZ, count) == pytest.approx(1.9 + 0.06 * 81.5, rel=0.01)
    assert np.ptp(second(5, 60.0, count)) == 0
    rows = renderer(1, count).render(round(30 * RATE_HZ), 4096)
    assert len({row.tobytes() for row in rows}) == count
    for channel in (0, 3):
        other = second(channel + 3, 30.0, count) - second(channel, 30.0, count)
        assert band_rms(other, 500, 16_000) > 0.2


def test_another_seed_is_another_recording_of_the_same_story() -> None:
    """Seeds change the noise and the slip, never the facts."""
    one, other = second(0, 30.0, seed=1), second(0, 30.0, seed=2)
    np.testing.assert_array_equal(second(0, 30.0, seed=1), one)
    assert np.mean(one != other) > 0.99
    assert band_rms(other, 500, 16_000) == pytest.approx(band_rms(one, 500, 16_000), rel=0.05)
    for before, after in zip(channels(1), channels(2), strict=True):
        assert before[0] == after[0]
        assert isinstance(before[0], ShaftOrders)
