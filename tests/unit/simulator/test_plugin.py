"""The plug-in: found by its entry point, paced without drift, closed at once."""

import threading
import time
import tomllib
from importlib.metadata import EntryPoint
from pathlib import Path

import numpy as np
import pytest

from humbell.model import Block
from humbell.sources import EndOfSource, Source
from humbell_sim.plugin import TarnholmSource, plugin
from humbell_sim.settings import TarnholmSettings
from unit.simulator.pacing import Clock

START_NS = 1_772_359_200_000_000_000  # 2026-03-01T10:00:00Z
ROOT = Path(__file__).parents[3]


def source(clock: Clock, pace: float = 1.0, seconds: float | None = None, seed: int = 1) -> TarnholmSource:
    """Return an open source with blocks of 0.25 s whose waiting moves the clock."""
    settings = TarnholmSettings(kind="tarnholm", channels=1, rate_hz=4000, pace=pace, seconds=seconds, seed=seed)
    one = TarnholmSource("sim", settings, clock.monotonic, lambda: START_NS, clock.event)
    one.open()
    return one


def next_block(one: TarnholmSource, timeout_s: float = 1.0) -> Block:
    """Return the next block, which must come within the timeout."""
    block = one.read(timeout_s)
    assert block is not None
    return block


def test_the_entry_point_names_the_plugin() -> None:
    """The daemon finds it as it would find any third party's driver."""
    names = tomllib.loads((ROOT / "pyproject.toml").read_text())["project"]["entry-points"]["humbell.sources"]
    assert EntryPoint("tarnholm", names["tarnholm"], "humbell.sources").load() is plugin


def test_the_plugin_makes_a_source_of_settings() -> None:
    """Settings are a model of its own, and what it makes keeps the contract of sources."""
    settings = plugin.settings.model_validate({"kind": "tarnholm", "pace": 0, "seconds": 0.5})
    made: Source = plugin.create("sim", settings, time.monotonic, lambda: START_NS)
    made.open()
    blocks = [made.read(0.0), made.read(0.0)]
    assert made.name == "sim"
    assert [(block.seq, block.start_ns - START_NS) for block in blocks if block] == [(0, 0), (1, 250_000_000)]
    with pytest.raises(EndOfSource):
        made.read(0.0)
    made.close()


def test_blocks_come_in_real_time() -> None:
    """Each is delivered when its last sample has been taken, and is waited for until then."""
    clock = Clock()
    one = source(clock)
    for number in range(1, 9):
        assert next_block(one).seq == number - 1
        assert clock.now_s == pytest.approx(1000 + number * 0.25, abs=1e-9)


def test_the_pace_is_seconds_of_signal_a_second() -> None:
    """At a pace of 60 a minute of signal takes a second; flat out nothing is waited for."""
    clock = Clock()
    one = source(clock, pace=60)
    for _ in range(240):
        last = next_block(one)
    assert clock.now_s == pytest.approx(1001)
    assert last.start_ns == START_NS + 59_750_000_000
    clock = Clock()
    one = source(clock, pace=0)
    for _ in range(10):
        next_block(one, 0.0)
    assert clock.waits_s == []


def test_a_slow_reader_does_not_make_the_clock_drift() -> None:
    """Deadlines count from the start: what each read costs does not add up."""
    clock = Clock()
    one = source(clock)
    for _ in range(400):
        next_block(one)
        clock.now_s += 0.1
    assert clock.now_s == pytest.approx(1000 + 400 * 0.25 + 0.1)


def test_after_a_pause_what_is_due_comes_at_once_and_nothing_is_skipped() -> None:
    """The reader may stop for a while: it gets every sample, without waiting, until it has caught up."""
    clock = Clock()
    one = source(clock)
    blocks = [next_block(one)]
    clock.now_s += 10.0
    clock.waits_s.clear()
    blocks += [next_block(one, 0.0) for _ in range(40)]
    assert clock.waits_s == []
    assert [block.seq for block in blocks] == list(range(41))
    assert one.read(0.0) is None
    blocks.append(next_block(one))
    assert clock.now_s == pytest.approx(1000 + 42 * 0.25)
    whole = source(Clock(), pace=0)
    expected = [next_block(whole).samples for _ in range(42)]
    np.testing.assert_array_equal(np.concatenate([b.samples for b in blocks]), np.concatenate(expected))


def test_a_read_waits_no_longer_than_it_may() -> None:
    """A block that is not due within the timeout is None now and a block later; no wait is below 0."""
    clock = Clock()
    one = source(clock)
    assert one.read(0.1) is None
    assert one.read(-1.0) is None
    assert one.read(0.1) is None
    assert clock.waits_s == pytest.approx([0.1, 0.0, 0.1])
    assert next_block(one, 0.1).seq == 0
    assert clock.now_s == pytest.approx(1000.25)


def test_the_end_stays_the_end() -> None:
    """After `seconds` of signal reading tells the end, and again."""
    one = source(Clock(), seconds=0.6)
    assert [next_block(one).length for _ in range(3)] == [1000, 1000, 400]
    for _ in range(2):
        with pytest.raises(EndOfSource):
            one.read(1.0)


def test_a_boot_is_a_seed_and_a_start() -> None:
    """Numbers begin at 0 with each opening; a receiver tells the runs apart by their boot."""
    starts = iter((START_NS, START_NS + 5))
    settings = TarnholmSettings(kind="tarnholm", channels=1, rate_hz=4000, pace=0, seed=7)
    one = TarnholmSource("sim", settings, Clock().monotonic, lambda: next(starts))
    one.open()
    first = next_block(one)
    next_block(one)
    one.close()
    one.open()
    again = next_block(one)
    assert (first.boot, again.boot) == (f"7-{START_NS}", f"7-{START_NS + 5}")
    assert (first.seq, again.seq) == (0, 0)
    np.testing.assert_array_equal(first.samples, again.samples)


def test_closing_ends_a_read_in_another_thread_at_once() -> None:
    """A stop does not wait for a block: the read that waits returns None. Closing twice is no fault."""
    settings = TarnholmSettings(kind="tarnholm", channels=1, rate_hz=4000, block_s=10)
    one = TarnholmSource("sim", settings, time.monotonic, lambda: START_NS)
    one.close()
    one.open()
    got: list[Block | None] = []
    reading = threading.Thread(target=lambda: got.append(one.read(10.0)))
    reading.start()
    time.sleep(0.05)
    began_s = time.monotonic()
    one.close()
    reading.join(5.0)
    assert time.monotonic() - began_s < 1
    assert got == [None]
    one.close()
    with pytest.raises(RuntimeError, match="sim is not open"):
        one.read(0.0)
