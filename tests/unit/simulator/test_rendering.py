"""Rendering: the same samples however they are cut, and fast."""

import time
from collections.abc import Callable
from itertools import pairwise

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from humbell_sim.parts import CHUNK, BearingDefect, BrokenCable, Noise, Order, Part, ShaftOrders
from humbell_sim.rendering import Renderer
from humbell_sim.tarnholm import RATE_HZ, renderer

# Every kind of part, and each with something going on in the first half second.
PARTS: tuple[Part, ...] = (
    ShaftOrders(24.7, (Order(1, 1.6), Order(2, 0.5, 0.3, 40))),
    Noise(2.5, (3, 0)),
    BearingDefect(88.4, 4200.0, 0.0012, 0.1, 30.0, (3, 1)),
)
CHANNELS = (PARTS, (*PARTS, BrokenCable(0.3)))
LENGTH = 6 * CHUNK
WHOLE = Renderer(CHANNELS, RATE_HZ).render(0, LENGTH)


@given(st.lists(st.integers(1, LENGTH - 1), max_size=20, unique=True).map(sorted))
def test_the_same_seed_gives_the_same_bytes_however_blocks_are_cut(cuts: list[int]) -> None:
    """Bit for bit: whatever the blocks' lengths, together they are the whole."""
    one = Renderer(CHANNELS, RATE_HZ)
    parts = [one.render(first, last - first) for first, last in pairwise([0, *cuts, LENGTH])]
    assert np.concatenate(parts, axis=1).tobytes() == WHOLE.tobytes()


@given(st.lists(st.tuples(st.integers(0, LENGTH - 1), st.integers(1, 9000)), min_size=1, max_size=8))
def test_any_span_can_be_made_alone_and_in_any_order(spans: list[tuple[int, int]]) -> None:
    """What was made before leaves no trace."""
    one = Renderer(CHANNELS, RATE_HZ)
    for first, length in spans:
        made = one.render(first, min(length, LENGTH - first))
        assert made.tobytes() == np.ascontiguousarray(WHOLE[:, first : first + length]).tobytes()


def test_samples_are_float32_of_all_channels() -> None:
    """(channels, n) float32, also for no sample at all."""
    one = Renderer(CHANNELS, RATE_HZ)
    assert one.render(0, 0).shape == (2, 0)
    made = one.render(CHUNK - 1, 2)
    assert (made.dtype, made.shape) == (np.dtype(np.float32), (2, 2))


def test_what_was_given_away_is_not_changed_later() -> None:
    """The chunk that is kept for the next block is no part of a block."""
    one = Renderer(CHANNELS, RATE_HZ)
    first = one.render(0, CHUNK)
    first[:] = 0
    assert one.render(0, CHUNK).tobytes() == np.ascontiguousarray(WHOLE[:, :CHUNK]).tobytes()


def _cores(channels: int, seconds: int) -> float:
    """Return the share of one core that blocks of 0.25 s at 51.2 kS/s take in real time."""
    one, length = renderer(1, channels), round(RATE_HZ / 4)
    # From 60 s on all faults of the story sound; the first block also makes the tables.
    first = round(60 * RATE_HZ)
    one.render(first - length, length)
    began = time.thread_time()
    for number in range(4 * seconds):
        one.render(first + number * length, length)
    return (time.thread_time() - began) / seconds


def test_rendering_tells_its_speed(figure: Callable[[str, str], None]) -> None:
    """What one core has to do for 16 channels at 51.2 kS/s; judged by the long test."""
    cores = _cores(16, 2)
    figure("simulator", f"16 channels at 51.2 kS/s on {cores:.3f} of a core")
    assert cores > 0


@pytest.mark.long
def test_sixteen_channels_take_less_than_a_quarter_of_a_core() -> None:
    """At 51.2 kS/s in real time, so that what is under test has the computer to itself."""
    assert _cores(16, 20) <= 0.25
