"""Row 9: the disk has no byte left, and another program takes each that is freed."""

import sqlite3
import time
from collections.abc import Iterator
from pathlib import Path

import numpy as np
import pytest

from faults.disks import fill, free_bytes, in_memory
from faults.load import ALARMS, POINTS, STATES, Simulated, journal, minute_of, numbered, told
from faults.rows import Figure, report
from humbell.app.keeper import Batch, Keeper
from humbell.journal import Deed, JournalError, chunks, open_for_reading, totals
from humbell.model import Coverage
from system.brokers import wait_for

HISTORY_MINUTES, FULL_MINUTES = 60, 12
WITHIN_S = 20.0


@pytest.fixture
def disk(tmp_path: Path) -> Iterator[Path]:
    """A small disk of its own."""
    with in_memory(tmp_path / "disk", "12m") as made:
        yield made


class Life:
    """
    A keeper and what it is given: a minute of readings and a transition at a time.

    Args:
        disk: on which its journal lies.
    """

    def __init__(self, disk: Path) -> None:
        self.clock = Simulated()
        self.journal = journal(disk, self.clock)
        self.journal.open()
        self.keeper = Keeper(self.journal)
        self.path = self.journal.settings.path
        self.minutes = 0
        self.longest_s = 0.0
        self._random = np.random.default_rng(2)

    def live(self) -> None:
        """Give the next minute, at once."""
        readings = tuple(minute_of(self.minutes, self._random))
        before_s = time.monotonic()
        self.keeper.give(Batch(readings, (numbered(self.minutes),), STATES))
        self.longest_s = max(self.longest_s, time.monotonic() - before_s)
        self.minutes += 1
        self.clock.second = 60.0 * self.minutes

    def end(self) -> None:
        """Stop, and write what waits."""
        self.keeper.task.stop()
        assert self.keeper.task.join(WITHIN_S)
        self.keeper.finish()

    def abandon(self) -> None:
        """Stop, whatever state it is in."""
        self.keeper.task.stop()
        self.keeper.task.join(WITHIN_S)
        self.journal.close()

    def assert_nothing_is_missing(self) -> list[bool]:
        """Compare what is stored with what was given; return of each minute whether its single values are there."""
        assert told(self.path) == list(range(self.minutes))
        with open_for_reading(self.path) as connection:
            covered = {point: accounts[Coverage.MEASURED].seconds for point, accounts in totals(connection).items()}
            velocities = [one for one in chunks(connection, point=POINTS[5]) if one.measure == "velocity_rms"]
        assert covered == dict.fromkeys(POINTS, 60.0 * self.minutes)
        assert sum(one.good_s for one in velocities) == 60.0 * self.minutes
        assert self.keeper.state.dropped_readings == 0
        return [one.readings is not None for one in velocities]


@pytest.fixture
def node(disk: Path) -> Iterator[Life]:
    """A keeper on it, not started yet."""
    made = Life(disk)
    yield made
    made.abandon()


@pytest.mark.slow
def test_a_full_disk_costs_old_values_and_no_alarm(node: Life, disk: Path, figure: Figure) -> None:
    """Twelve minutes at zero bytes: transitions count at once, readings are committed, and it is told what to do."""
    node.keeper.task.start()
    for _ in range(HISTORY_MINUTES):
        node.live()
    wait_for(lambda: len(told(node.path)) == HISTORY_MINUTES, WITHIN_S, "a history")
    ballast = disk / "journal.db.ballast"
    assert ballast.exists()
    assert not node.keeper.state.trouble
    for _ in range(FULL_MINUTES):
        fill(disk)
        assert free_bytes(disk) == 0
        node.live()
        wait_for(lambda: len(told(node.path)) == node.minutes, WITHIN_S, "a transition on the full disk")
        wait_for(lambda: node.keeper.state.pending_s == 0, WITHIN_S, "a commit on the full disk")
    assert not ballast.exists()
    assert f"{node.path}: the disk is full: the oldest one-second values make room for new ones (free some space)" == (
        node.keeper.state.trouble
    )
    (disk / "filler").unlink()
    node.live()
    wait_for(lambda: not node.keeper.state.trouble, WITHIN_S, "no trouble with room again")
    assert ballast.stat().st_size == 2**20
    node.end()
    kept = node.assert_nothing_is_missing()
    assert kept == sorted(kept)
    assert not kept[0]
    assert kept[-1]
    report(
        figure,
        9,
        f"disk at 0 bytes for {FULL_MINUTES} min, everything freed taken by others",
        "evidence shed first, alarms flow, capture gap 0",
        f"0 of {node.minutes} transitions and 0 s of coverage lost; values of {kept.count(False)} of {node.minutes} "
        f"min shed; giving a batch took {node.longest_s * 1000:.1f} ms at most",
    )


def test_a_young_journal_writes_alarms_on_a_full_disk_too(node: Life, disk: Path) -> None:
    """Nearly all of it stands in the write-ahead log still, which must not have to grow."""
    node.keeper.task.start()
    for _ in range(2):
        node.live()
    wait_for(lambda: node.keeper.state.pending_s == 0, WITHIN_S, "a commit")
    for _ in range(3):
        fill(disk)
        node.live()
        wait_for(lambda: len(told(node.path)) == node.minutes, WITHIN_S, "a transition on the full disk")
    (disk / "filler").unlink()
    node.end()
    node.assert_nothing_is_missing()


@pytest.mark.slow
def test_with_nothing_to_give_up_all_waits_and_is_written_later(node: Life, disk: Path) -> None:
    """A new journal on a full disk: measuring goes on, commands are refused, nothing is lost."""
    (disk / "journal.db.ballast").unlink()
    fill(disk)
    node.keeper.task.start()
    for _ in range(5):
        node.live()
    wait_for(
        lambda: "cannot be written: database or disk is full (check space" in node.keeper.state.trouble,
        WITHIN_S,
        "trouble",
    )
    for _ in range(5):
        node.live()
    deed = Deed("mara", "command line", "acknowledge", ALARMS[0].name, "seen", "done")
    with pytest.raises((TimeoutError, sqlite3.OperationalError)):
        node.keeper.note(deed, 0.1)
    assert node.longest_s < 0.5
    (disk / "filler").unlink()
    wait_for(lambda: not node.keeper.state.trouble, WITHIN_S, "no trouble with room again")
    wait_for(lambda: len(told(node.path)) == node.minutes, WITHIN_S, "all transitions")
    node.end()
    assert all(node.assert_nothing_is_missing())


def test_a_start_on_a_full_disk_takes_the_journal_for_what_it_is(disk: Path) -> None:
    """Sound: it is opened with the room of the ballast, goes on from its last states, and alarms are written."""
    kept = journal(disk, Simulated())
    kept.open()
    for one in minute_of(0, np.random.default_rng(1)):
        kept.add(one)
    kept.commit(STATES)
    kept.close()
    fill(disk)
    assert free_bytes(disk) == 0
    resumed = kept.open()
    assert resumed.put_aside is None
    assert resumed.states == STATES
    kept.tell(*numbered(0))
    assert "the disk is full" in kept.trouble
    assert told(kept.settings.path) == [0]
    kept.close()


def test_a_start_without_a_byte_is_told_and_leaves_the_journal_as_it_is(disk: Path) -> None:
    """Where even the ballast is gone there is no journal; the old one is no damaged one."""
    kept = journal(disk, Simulated())
    kept.open()
    kept.tell(*numbered(0))
    kept.close()
    (disk / "journal.db.ballast").unlink()
    fill(disk)
    with pytest.raises(JournalError, match="check rights, space"):
        kept.open()
    (disk / "filler").unlink()
    assert kept.open().put_aside is None
    assert told(kept.settings.path) == [0]
    kept.close()
