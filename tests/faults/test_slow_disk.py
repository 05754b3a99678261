"""Rows 10 and 11: a disk that hangs, and a reader that does not let go."""

import sqlite3
import time
from collections.abc import Iterator
from contextlib import closing
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from faults.load import POINTS, SECOND_NS, START_NS, STATES, Simulated, journal, numbered, second_of, told
from faults.rows import Figure, report
from humbell.app.keeper import Batch, Keeper
from humbell.journal import last_seq, open_for_reading, readings, totals
from humbell.model import Coverage
from system.brokers import wait_for

STALL_S = 5.0
BATCH_S = 0.25  # blocks come at some four a second
WITHIN_S = 20.0
LIMIT_BYTES = 16 * 2**20  # of the write-ahead log, before it is reported
RESTING_BYTES = 3_276_800  # what the log may keep once nobody holds it


@pytest.fixture
def keeper(tmp_path: Path) -> Iterator[Keeper]:
    """A keeper at work, which commits every second."""
    kept = journal(tmp_path, Simulated(), commit_s=1)
    kept.open()
    made = Keeper(kept)
    made.task.start()
    yield made
    made.task.stop()
    made.task.join(WITHIN_S)
    kept.close()


@pytest.mark.slow
def test_a_disk_that_hangs_for_five_seconds_costs_nothing(keeper: Keeper, figure: Figure) -> None:
    """Batches go on coming meanwhile: none waits, none is lost, and transitions keep their order."""
    path = Path(keeper.state.path)
    random, number, longest_s = np.random.default_rng(1), 0, 0.0

    def live(for_s: float) -> None:
        nonlocal number, longest_s
        for _ in range(round(for_s / BATCH_S)):
            told_now = (numbered(2 * number), numbered(2 * number + 1))
            batch = Batch(tuple(second_of(number + 1, random)), told_now, STATES)
            before_s = time.monotonic()
            keeper.give(batch)
            longest_s = max(longest_s, time.monotonic() - before_s)
            number += 1
            time.sleep(BATCH_S)

    live(1.0)
    with closing(sqlite3.connect(path, isolation_level=None)) as other:
        wait_for(lambda: told(path) == list(range(8)), WITHIN_S, "the first transitions")
        other.execute("BEGIN IMMEDIATE")
        live(STALL_S)
        wait_for(lambda: "cannot be written: database is locked" in keeper.state.trouble, WITHIN_S, "a failed write")
        assert told(path) == list(range(8))
        highest = keeper.queue.state.highest
        other.execute("ROLLBACK")
    live(1.0)
    wait_for(lambda: len(told(path)) == 2 * number, WITHIN_S, "all transitions")
    wait_for(lambda: not keeper.state.trouble, WITHIN_S, "no trouble any more")
    keeper.task.stop()
    assert keeper.task.join(WITHIN_S)
    keeper.finish()

    assert told(path) == list(range(2 * number))
    with open_for_reading(path) as connection:
        seconds = [
            (one.time_ns - START_NS) // SECOND_NS
            for one in readings(connection, point=POINTS[3])
            if one.measure == "velocity_rms"
        ]
        covered = {point: accounts[Coverage.MEASURED].seconds for point, accounts in totals(connection).items()}
    assert seconds == list(range(1, number + 1))
    assert covered == dict.fromkeys(POINTS, float(number))
    assert (keeper.state.dropped_readings, keeper.queue.state.dropped) == (0, 0)
    assert longest_s < STALL_S / 5
    report(
        figure,
        10,
        f"writes stalled {STALL_S:g} s",
        "ring absorbs, 0 samples lost",
        f"0 of {number} s lost, 0 of {2 * number} transitions; at most {highest} batches waited, giving one took "
        f"{longest_s * 1000:.0f} ms at most",
    )


@pytest.mark.slow
def test_a_read_that_is_left_open_is_reported(keeper: Keeper, figure: Figure) -> None:
    """With what to do; the writer goes on, and once the reader is gone the log shrinks and nothing is said any more."""
    path, number = Path(keeper.state.path), 0
    log = path.with_name(path.name + "-wal")

    def tell(bytes_: int) -> None:
        nonlocal number
        transition, state = numbered(number)
        keeper.give(Batch((), ((replace(transition, occurrence="x" * bytes_), state),), STATES))
        number += 1
        wait_for(lambda: keeper.state.commits >= number, WITHIN_S, "a transition")

    with open_for_reading(path) as connection:
        connection.execute("BEGIN")
        assert last_seq(connection) == 0
        while log.stat().st_size <= LIMIT_BYTES:
            assert not keeper.state.trouble
            tell(400_000)
        largest = log.stat().st_size
        assert "the write-ahead log has grown to 16 MiB: a program keeps a read open" in keeper.state.trouble
        assert f"(find it with: fuser {path}; stop it)" in keeper.state.trouble
        assert last_seq(connection) == 0
    held = number
    while keeper.state.trouble:
        assert number < held + 5
        tell(10)
    assert log.stat().st_size <= RESTING_BYTES
    keeper.task.stop()
    assert keeper.task.join(WITHIN_S)
    keeper.finish()
    assert told(path) == list(range(number))
    report(
        figure,
        11,
        "read transaction left open",
        "reader closed or reported, WAL <= limit",
        f"reported at {largest / 2**20:.1f} MiB, shrunk {number - held} commits after its end, 0 of {number} lost",
    )
