"""Blocks of the story: numbers, times and when each is due."""

import numpy as np
import pytest

from humbell.model import SampleUnit
from humbell.wire import decode, encode
from humbell_sim.blocks import Blocks
from humbell_sim.settings import TarnholmSettings
from humbell_sim.tarnholm import renderer

START_NS = 1_772_359_200_000_000_000  # 2026-03-01T10:00:00Z


def settings(
    rate_hz: float = 4000.0, block_s: float = 0.25, seconds: float | None = 1.1, pace: float = 1.0
) -> TarnholmSettings:
    """Return settings that are quick to play."""
    return TarnholmSettings(kind="tarnholm", rate_hz=rate_hz, block_s=block_s, seconds=seconds, pace=pace)


def test_blocks_together_are_the_story() -> None:
    """Every sample comes once and in order; the last block holds the rest."""
    blocks = Blocks("sim", settings(), START_NS)
    taken = []
    while not blocks.finished:
        taken.append(blocks.take())
    assert [block.length for block in taken] == [1000, 1000, 1000, 1000, 400]
    assert [block.seq for block in taken] == [0, 1, 2, 3, 4]
    samples = np.concatenate([block.samples for block in taken], axis=1)
    np.testing.assert_array_equal(samples, renderer(1, 3, 4000.0).render(0, 4400))


def test_a_block_says_what_it_is() -> None:
    """Float32 in g, of the source, read-only; it goes over the wire as it is."""
    block = Blocks("sim", settings(), START_NS).take()
    assert (block.source, block.boot, block.rate_hz, block.unit) == ("sim", f"1-{START_NS}", 4000.0, SampleUnit.G)
    assert block.samples.dtype == np.float32
    assert not block.samples.flags.writeable
    assert not block.piece
    sent = decode(encode(block), "sim")
    np.testing.assert_array_equal(sent.samples, block.samples)
    assert (sent.boot, sent.seq, sent.start_ns) == (block.boot, block.seq, block.start_ns)


@pytest.mark.parametrize("rate_hz", [4000.0, 48_828.125, 11_111.1])
def test_times_come_from_counting_samples(rate_hz: float) -> None:
    """Block i starts at start + round(first sample's number x 1e9 / rate): nothing adds up."""
    blocks = Blocks("sim", settings(rate_hz=rate_hz, block_s=0.0137, seconds=None), START_NS)
    length = settings(rate_hz=rate_hz, block_s=0.0137).block_length
    for number in range(100):
        assert blocks.take().start_ns == START_NS + round(number * length * 1e9 / rate_hz)


def test_a_block_is_due_when_its_last_sample_has_been_taken() -> None:
    """A converter has no block before that; the pace divides the time, and flat out everything is due at once."""
    assert Blocks("sim", settings(), START_NS).due_s == 0.25
    assert Blocks("sim", settings(pace=10), START_NS).due_s == 0.025
    assert Blocks("sim", settings(pace=0), START_NS).due_s == 0
    blocks = Blocks("sim", settings(), START_NS)
    for _ in range(4):
        blocks.take()
    assert blocks.due_s == 1.1


def test_a_story_without_an_end_never_finishes() -> None:
    """Without `seconds` there is always a next block."""
    blocks = Blocks("sim", settings(seconds=None), START_NS)
    assert blocks.endless
    assert not blocks.finished
    assert not Blocks("sim", settings(), START_NS).endless
