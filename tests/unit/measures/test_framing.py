"""Frames are cut by counting samples: how many, which, and what time they carry."""

from collections.abc import Iterable
from itertools import pairwise

import numpy as np
import pytest
from hypothesis import given, settings
from numpy.typing import NDArray

from humbell.measures.framing import Frame, Framer
from humbell.model import Samples
from signals import START_NS, cuts, noise, parts

SECOND_NS = 1_000_000_000


def make(rate_hz: float, frame_s: float = 1.0, ahead_s: float = 0.0, channels: tuple[int, ...] = (0,)) -> Framer:
    return Framer(rate_hz, frame_s, ahead_s, np.array(channels, dtype=np.intp))


def feed_all(framer: Framer, samples: Samples, places: list[int], rate_hz: float) -> list[Frame]:
    """Return the frames of a stream that is cut at *places*, the flushed ones too."""
    frames, at = [], 0
    for part in parts(samples, places):
        frames += framer.feed(part, START_NS + round(at * 1e9 / rate_hz))
        at += part.shape[1]
    return frames + framer.flush()


def ends_of(starts_ns: Iterable[int]) -> NDArray[np.int64]:
    """Return the end times, ns since START_NS, of the frames of one-second blocks with these start times."""
    framer, samples = make(100.0), np.zeros((1, 100))
    frames = [frame for start_ns in starts_ns for frame in framer.feed(samples, START_NS + start_ns)]
    return np.array([frame.end_ns - START_NS for frame in frames])


@pytest.mark.parametrize("rate_hz", [100.0, 2560.0, 11_111.1, 48_828.125, 99.3, 0.7 * 1000])
@pytest.mark.parametrize("frame_s", [1.0, 0.25, 5.0])
def test_the_average_length_is_right_over_a_thousand_frames(rate_hz: float, frame_s: float) -> None:
    """A frame has a whole number of samples, one more or fewer at times, so that the average is right for any rate."""
    framer = make(rate_hz, frame_s)
    lengths: list[int] = []
    for first in range(0, 1000, 10):
        # Ten frames at a time, so that no thousand of them lie in memory.
        length = round((first + 10) * frame_s * rate_hz) - round(first * frame_s * rate_hz)
        start_ns = START_NS + round(first * frame_s * 1e9)
        lengths += [frame.samples.shape[1] for frame in framer.feed(np.zeros((1, length), np.int16), start_ns)]
    assert len(lengths) == 1000
    assert sum(lengths) == round(1000 * frame_s * rate_hz)
    assert set(lengths) <= {int(frame_s * rate_hz), int(frame_s * rate_hz) + 1}


@pytest.mark.parametrize("rate_hz", [100.0, 11_111.1, 48_828.125])
def test_a_frame_carries_the_time_of_its_end_by_count(rate_hz: float) -> None:
    """The end time is the first block's time plus the samples counted since, to half a sample and a nanosecond."""
    framer = make(rate_hz)
    samples = np.broadcast_to(np.float32(1), (1, round(100 * rate_hz)))
    ends = [frame.end_ns - START_NS for frame in framer.feed(samples, START_NS)]
    np.testing.assert_allclose(ends, np.arange(1, 101) * SECOND_NS, rtol=0, atol=0.5 * SECOND_NS / rate_hz + 1)


@settings(max_examples=60)
@given(places=cuts(1234))
def test_the_frames_do_not_depend_on_how_the_stream_is_cut(places: list[int]) -> None:
    """Samples, look-ahead and time are the same to the bit for any cutting, at a rate that is no whole number."""
    samples = noise(1, 3, 1234)
    wanted = feed_all(make(99.3, ahead_s=0.15, channels=(2, 0)), samples, [], 99.3)
    frames = feed_all(make(99.3, ahead_s=0.15, channels=(2, 0)), samples, places, 99.3)
    assert len(frames) == len(wanted) == 12
    for frame, other in zip(frames, wanted, strict=True):
        np.testing.assert_array_equal(frame.samples, other.samples)
        np.testing.assert_array_equal(frame.ahead, other.ahead)
        assert frame.end_ns == other.end_ns


def test_the_frames_together_are_the_stream() -> None:
    """Every sample of the asked channels is in exactly one frame, in order; what follows a frame begins the next."""
    samples = noise(2, 4, 1050)
    frames = feed_all(make(100.0, ahead_s=0.2, channels=(3, 1)), samples, list(range(37, 1050, 37)), 100.0)
    joined = np.concatenate([frame.samples for frame in frames], axis=1)
    np.testing.assert_array_equal(joined, samples[[3, 1], :1000])
    for frame, following in pairwise(frames):
        np.testing.assert_array_equal(frame.ahead, following.samples[:, :20])


def test_a_frame_waits_for_what_follows_it() -> None:
    """A frame comes out with its look-ahead whole, not a sample earlier; flushing gives it out with what there is."""
    framer = make(100.0, ahead_s=0.2)
    assert framer.feed(noise(3, 1, 119), START_NS) == []
    (frame,) = framer.feed(noise(4, 1, 1), START_NS + 1_190_000_000)
    assert frame.samples.shape == (1, 100)
    assert frame.ahead.shape == (1, 20)
    assert framer.feed(noise(5, 1, 87), START_NS + 1_200_000_000) == []
    (last,) = framer.flush()
    assert last.ahead.shape == (1, 7)
    assert last.end_ns == START_NS + 2 * SECOND_NS


def test_what_is_left_of_a_stream_is_told_in_seconds() -> None:
    """`held_s` counts the samples of the frame that is not whole; a restart forgets them and its time."""
    framer = make(100.0)
    framer.feed(noise(6, 1, 250), START_NS)
    assert framer.held_s == pytest.approx(0.5)
    assert framer.flush() == []
    framer.restart()
    assert framer.held_s == 0
    (frame,) = framer.feed(noise(7, 1, 100), START_NS + 60 * SECOND_NS)
    assert frame.end_ns == START_NS + 61 * SECOND_NS


def test_jitter_of_the_time_stamps_is_not_followed() -> None:
    """Time stamps that differ by less than 5 ms from the count move nothing."""
    ends = ends_of(i * SECOND_NS + jitter for i, jitter in enumerate([0, 4_000_000, -4_000_000, 3_000_000]))
    assert ends.tolist() == [SECOND_NS, 2 * SECOND_NS, 3 * SECOND_NS, 4 * SECOND_NS]


@pytest.mark.parametrize("jump_ns", [10_000_000, -10_000_000])
def test_a_jump_of_the_senders_clock_is_followed(jump_ns: int) -> None:
    """A time stamp 10 ms from the count is taken over, for the block that carries it and for those behind."""
    starts = [i * SECOND_NS + (jump_ns if i >= 3 else 0) for i in range(6)]
    assert ends_of(starts).tolist() == [start + SECOND_NS for start in starts]


@pytest.mark.parametrize("ppm", [200, -200])
def test_drift_of_the_senders_clock_is_followed(ppm: int) -> None:
    """Over ten minutes at 200 ppm, 120 ms in all, no frame's time is further than 5.2 ms from the sender's."""
    step_ns = SECOND_NS + ppm * 1000
    ends = ends_of(i * step_ns for i in range(600))
    wander_ns = np.abs(ends - np.arange(1, 601) * step_ns)
    assert ends.size == 600
    assert wander_ns.max() <= 5_200_000


@pytest.mark.parametrize("dtype", [np.int16, np.int32, np.float32, np.float64])
@pytest.mark.parametrize("channels", [(0, 1), (1, 0), (1,)])
def test_blocks_are_taken_as_they_are_and_never_changed(dtype: type, channels: tuple[int, ...]) -> None:
    """Every type of sample keeps its values; a read-only block will do, and writing to a frame leaves it alone."""
    samples: Samples = (noise(8, 2, 300) * 1000).round().astype(dtype)
    before = samples.copy()
    samples.flags.writeable = False
    frames = feed_all(make(100.0, ahead_s=0.1, channels=channels), samples, [90, 210], 100.0)
    np.testing.assert_array_equal(np.concatenate([f.samples for f in frames], axis=1), before[list(channels)])
    for frame in frames:
        frame.samples[:] = 0
        frame.ahead[:] = 0
    np.testing.assert_array_equal(samples, before)


def test_counts_of_32_bits_keep_all_their_bits() -> None:
    """A converter count that no float32 holds stays what it is."""
    samples = np.full((1, 100), 2**31 - 1, dtype=np.int32)
    (frame,) = make(100.0).feed(samples, START_NS)
    assert float(frame.samples[0, 0]) == 2**31 - 1
