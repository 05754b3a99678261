"""Steps of the mean: found wherever they fall, and not seen where there are none."""

from collections.abc import Callable

import numpy as np
import pytest
from numpy.typing import NDArray

from humbell.measures import Band, Bank
from humbell.measures.framing import Framer
from humbell.measures.steps import StepSearch
from humbell.model import STANDARD_GRAVITY, Cause
from signals import SLOW_VELOCITY, START_NS, VELOCITY, measure, noise, point, sine, times, vibration

RATE_HZ = 2560.0  # the lowest that carries the band: the search looks at means of 5 ms, whatever the rate
STEP = 0.2 * STANDARD_GRAVITY
SECONDS = 11


def search(
    samples: NDArray[np.float64], rate_hz: float = RATE_HZ, frame_s: float = 1.0, lower_hz: float = 10.0
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Return heights and places, each (frames, channels), in all frames of a stream that goes on behind them."""
    channels = np.arange(len(samples))
    framer = Framer(rate_hz, frame_s, StepSearch.ahead_s(lower_hz), channels)
    steps = StepSearch(rate_hz, frame_s, lower_hz, len(samples))
    alive = np.ones(len(samples), dtype=bool)
    found = [steps.find(frame, alive) for frame in framer.feed(samples, START_NS)]
    return np.array([height for height, _ in found]), np.array([place for _, place in found])


def stepped(base: NDArray[np.float64], places: NDArray[np.int_], height: float = STEP) -> NDArray[np.float64]:
    """Return *base* (n,) once for each place, (places, n), with a step there."""
    return base + height * (np.arange(base.size) >= places[:, None])


def false_steps(samples: NDArray[np.float64], band: Band = VELOCITY, frame_s: float = 1.0) -> tuple[int, int]:
    """Return how many frames were refused for a step, and of how many."""
    plans = [point(channel, band, frame_s=frame_s) for channel in range(len(samples))]
    readings = measure(Bank(RATE_HZ, plans, None), samples, RATE_HZ)
    return sum(reading.cause is Cause.DC_STEP for reading in readings), len(readings)


# Frame edges and single samples around them, the last 5 ms sample by sample, and all over the frame.
PLACES = np.unique(np.concatenate([np.arange(-2, 3), 2560 - np.arange(13), np.linspace(0, 2560, 60).astype(int)]))


@pytest.mark.parametrize("velocity_mm_s", [0.1, 1.0, 5.0])
@pytest.mark.parametrize("height", [STEP, -STEP])
def test_a_step_is_found_wherever_it_falls(velocity_mm_s: float, height: float) -> None:
    """
    A step of 0.2 g is found with its height to 15 % and its place to 20 ms, in the frame it falls in.

    One at a frame's edge may be seen in the frame before or behind; one in a frame's last 5 ms in that frame.
    """
    base = vibration(RATE_HZ, 7, 25.0, velocity_mm_s) + 9.80665
    heights, places = search(stepped(base, 3 * 2560 + PLACES, height))
    seen_s = np.where(heights > 0, places + np.arange(len(heights))[:, None], np.nan)
    off_s = np.abs(seen_s - (3 + PLACES / RATE_HZ))
    assert np.nanmin(off_s, axis=0).max() <= 0.020
    np.testing.assert_allclose(heights.max(axis=0), STEP, rtol=0.15)
    inside = (PLACES >= 0) & (PLACES < 2560)
    assert (heights[3, inside] > 0.5 * STEP).all()


def test_a_step_in_the_first_frame_is_found_without_a_history() -> None:
    """The rest of the first frame tells what is usual there."""
    places = np.linspace(500, 2500, 40).astype(int)
    heights, _ = search(stepped(vibration(RATE_HZ, 3, 25.0, 1.0), places))
    assert (heights[0] > 0.5 * STEP).all()


@pytest.mark.parametrize("rate_hz", [2560.0, 2560.9, 11_111.1, 1000.7])
@pytest.mark.parametrize(("frame_s", "lower_hz"), [(1.0, 10.0), (5.0, 2.0), (0.25, 60.0), (1.003, 500.0)])
def test_steps_are_found_at_any_rate_and_frame_length(rate_hz: float, frame_s: float, lower_hz: float) -> None:
    """The parts that are searched are never shorter than a sample, at rates that are no whole number either."""
    places = np.round(np.linspace(3.2, 3.8, 7) * frame_s * rate_hz).astype(int)
    heights, found_s = search(
        stepped(0.01 * noise(1, round(6 * frame_s * rate_hz)), places), rate_hz, frame_s, lower_hz
    )
    assert (heights[3] > 0.5 * STEP).all()
    np.testing.assert_allclose(found_s[3] + 3 * frame_s, places / rate_hz, rtol=0, atol=0.2 / lower_hz + 2 / rate_hz)
    assert not heights[:3].any()


@pytest.mark.parametrize("value", [np.nan, np.inf, -np.inf, 3e38])
def test_what_is_no_number_is_no_step(value: float) -> None:
    """A frame that sees a NaN or an infinity ahead of it is not blamed; one with it is not looked at."""
    samples = 0.01 * noise(2, 1, 5 * 2560).astype(np.float32)
    samples[0, 3 * 2560 + 100] = value
    framer = Framer(RATE_HZ, 1.0, StepSearch.ahead_s(10.0), np.arange(1))
    steps = StepSearch(RATE_HZ, 1.0, 10.0, 1)
    for second, frame in enumerate(framer.feed(samples, START_NS)):
        height, _ = steps.find(frame, np.array([second != 3]))
        assert height[0] == 0 or (second == 2 and value == np.float32(3e38))


def test_dead_channels_are_not_looked_at_and_leave_no_history() -> None:
    """A channel that comes back from another level shows no step against what was before."""
    samples = 0.01 * noise(3, 2, 5 * 2560)
    samples[0, 2 * 2560 :] += 100
    framer = Framer(RATE_HZ, 1.0, 0.0, np.arange(2))  # no look-ahead: nothing of the next frame is seen
    steps = StepSearch(RATE_HZ, 1.0, 10.0, 2)
    for second, frame in enumerate(framer.feed(samples, START_NS)):
        heights, _ = steps.find(frame, np.array([second != 1, True]))
        assert heights.tolist() == [0.0, 0.0]


def test_a_restart_forgets_the_signal_before() -> None:
    """After a gap another mean is no step."""
    steps = StepSearch(RATE_HZ, 1.0, 10.0, 1)
    for offset in (0.0, 5.0, -5.0):
        framer = Framer(RATE_HZ, 1.0, 0.15, np.arange(1))
        for frame in framer.feed(0.01 * noise(4, 1, 3 * 2560) + offset, START_NS):
            assert steps.find(frame, np.array([True]))[0] == 0
        steps.restart()


def test_steady_signals_hold_no_steps(figure: Callable[[str, str], None]) -> None:
    """
    Sines from 2 to 1000 Hz are never refused, white noise and a random walk at most once in a thousand frames.

    A stream's first frame, which settles anyway, is the one in which there is little to tell what is usual.
    """
    rng = np.random.default_rng(5)
    frequencies = np.concatenate([np.geomspace(2, 1000, 140), rng.uniform(2, 60, 60)])
    waves = np.array([sine(RATE_HZ, SECONDS, f, phase=rng.uniform(0, 6.28)) for f in frequencies])
    white = noise(6, 100, waves.shape[1])
    red = np.cumsum(noise(7, 60, waves.shape[1]), axis=1)
    counts = {
        "sines": false_steps(waves),
        "sines, from 2 Hz": false_steps(waves[::2], SLOW_VELOCITY, 5.0),
        "white noise": false_steps(white),
        "random walk": false_steps(red),
    }
    figure("false steps in steady signals", ", ".join(f"{k} {n} of {m}" for k, (n, m) in counts.items()))
    assert counts["sines"][0] == counts["sines, from 2 Hz"][0] == 0
    assert counts["white noise"][0] <= 1
    assert counts["random walk"][0] <= 1


def test_slow_sway_below_the_band_is_no_step(figure: Callable[[str, str], None]) -> None:
    """A floor that sways at 0.05 to 5 Hz with half a g under a machine of 1 mm/s: at most one frame in a thousand."""
    frequencies = np.geomspace(0.05, 5, 200)
    sway = np.array([sine(RATE_HZ, SECONDS, f, 5 / np.sqrt(2), phase=100 * f) for f in frequencies])
    false, frames = false_steps(sway + vibration(RATE_HZ, SECONDS, 25.0, 1.0))
    figure("false steps in sway of 0.05 to 5 Hz", f"{false} of {frames}")
    assert false <= frames / 1000


def event_times(seed: int) -> NDArray[np.float64]:
    """Return when each of a hundred events happens, (100, 1), s."""
    return np.random.default_rng(seed).uniform(3, 8, (100, 1))


def test_jumps_and_starts_are_seldom_taken_for_steps(figure: Callable[[str, str], None]) -> None:
    """
    Jumps of the amplitude by ten and starts from standstill cost a frame at most once in four times.

    Those fall into the look-ahead of a frame that is quiet itself.
    """
    rng = np.random.default_rng(8)
    moments, at_s = times(RATE_HZ, 9), event_times(9)
    frequencies = np.geomspace(10, 1000, 100)
    waves = np.array([sine(RATE_HZ, 9, f, phase=rng.uniform(0, 6.28)) for f in frequencies])
    counts = {
        "jumps up": false_steps(waves * np.where(moments < at_s, 1, 10))[0],
        "jumps down": false_steps(waves * np.where(moments < at_s, 10, 1))[0],
        "starts": false_steps(waves * (moments >= at_s) + 0.01 * noise(10, 100, moments.size))[0],
    }
    figure("frames taken for steps, of 100 events each", ", ".join(f"{n} {k}" for k, n in counts.items()))
    assert counts["jumps up"] <= 25
    assert counts["jumps down"] <= 8
    assert counts["starts"] <= 25


def test_light_blows_are_not_taken_for_steps(figure: Callable[[str, str], None]) -> None:
    """
    A blow of 1 m/s² that rings at 15 Hz for a tenth of a second costs next to nothing at a machine of 2 mm/s.

    A heavy one makes the mean swing for a period of the lower edge and cannot be told from a step there and back; the
    figure says how many cost a frame or two.
    """
    moments, at_s = times(RATE_HZ, 9), event_times(11)
    machine = vibration(RATE_HZ, 9, 25.0, 2.0) + 0.1 * noise(12, 100, moments.size)
    turn = 2 * np.pi * 15 * np.maximum(moments - at_s, 0)
    blow = np.where(moments < at_s, 0, np.exp(-turn / (2 * np.pi * 1.5)))
    counts = {
        "blows of 1 m/s² at 15 Hz": false_steps(machine + blow * np.sin(turn))[0],
        "blows of 10 m/s²": false_steps(machine + 10 * blow * np.sin(turn))[0],
        "blows of 10 m/s² from the crest": false_steps(machine + 10 * blow * np.cos(turn))[0],
    }
    figure("frames taken for steps, of 100 blows each", ", ".join(f"{n} {k}" for k, n in counts.items()))
    assert counts["blows of 1 m/s² at 15 Hz"] <= 5
    assert counts["blows of 10 m/s² from the crest"] <= 30
