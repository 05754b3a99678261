"""The journal's task: what it is given is written, in order; while the disk is away it waits, with a bound."""

import sqlite3
import time
from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from pathlib import Path
from typing import Any, cast

import pytest
from structlog.testing import capture_logs

from humbell.alarms import AlarmState
from humbell.app import keeper as module
from humbell.app.keeper import Batch, Keeper
from humbell.journal import Deed, Journal, JournalSettings
from humbell.model import AlarmId, AlarmType, LifeCycle, Measure, Moment, Quality, Reading, Transition

ALARM = AlarmId("p-101", "de-h", Measure.VELOCITY_RMS, AlarmType.HIGH)
DEED = Deed("ines", "command line", "acknowledge", "p-101/de-h velocity_rms.high", "", "accepted")
COMMIT_S = 4.0
PATIENCE_S = 5.0


class FakeJournal:
    """A journal in memory, whose disk can be taken away."""

    def __init__(self, path: Path) -> None:
        self.settings = JournalSettings(path=path, commit_s=COMMIT_S)
        self.away = False
        self.trouble = ""
        self.waiting: list[Reading] = []
        self.written: list[object] = []
        self.commits = 0
        self.last_commit: Moment | None = None
        self.closed = False

    @property
    def pending_s(self) -> float:
        """Seconds that wait."""
        return sum(one.span_s for one in self.waiting)

    def add(self, reading: Reading) -> None:
        """Keep *reading*."""
        self.waiting.append(reading)

    def tell(self, transition: Transition, _state: AlarmState) -> int:
        """Write *transition*."""
        return self._write(transition)

    def note(self, deed: Deed) -> int:
        """Write *deed*."""
        return self._write(deed)

    def commit(self, _states: Mapping[AlarmId, AlarmState]) -> int:
        """Write what waits, if anything does."""
        if self.waiting:
            self._write([one.time_ns for one in self.waiting])
            self.waiting.clear()
            self.last_commit = Moment("b", 0, 0)
        return 0

    def close(self) -> None:
        """Let go."""
        self.closed = True

    def _write(self, thing: object) -> int:
        if self.away:
            raise sqlite3.OperationalError("database or disk is full")
        self.written.append(thing)
        self.commits += 1
        return len(self.written)


def reading(second: int) -> Reading:
    """Return a reading of one second."""
    return Reading(second, "p-101", "de-h", Measure.VELOCITY_RMS, 1.0, 1.0, Quality.GOOD)


def transition(second: int) -> tuple[Transition, AlarmState]:
    """Return a transition."""
    after = LifeCycle.UNACKNOWLEDGED
    told = Transition(second, ALARM, LifeCycle.NORMAL, after, verified=True, value=5.0, limit=4.5, occurrence="o")
    return told, AlarmState(life_cycle=after)


def batch(*seconds: int, told: int | None = None) -> Batch:
    """Return readings of these seconds, and a transition at one."""
    return Batch(tuple(map(reading, seconds)), () if told is None else (transition(told),), {})


@pytest.fixture
def journal(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> FakeJournal:
    """A journal, and no pauses."""
    monkeypatch.setattr(module, "_PAUSE_S", 0.0)
    monkeypatch.setattr(module, "_TURN_S", 0.01)
    return FakeJournal(tmp_path / "journal.db")


def keeper_of(journal: FakeJournal) -> Keeper:
    """Return a keeper, whose task is turned by hand."""
    return Keeper(cast("Journal", journal))


def turn(keeper: Keeper, times: int = 1) -> None:
    """Have the task do so many rounds."""
    for _ in range(times):
        assert cast("Any", keeper)._turn()  # noqa: SLF001 - instead of a thread and waiting


@contextmanager
def running(keeper: Keeper) -> Iterator[None]:
    """Have the task run."""
    keeper.task.start()
    try:
        yield
    finally:
        keeper.task.stop()
        assert keeper.task.join(PATIENCE_S)


def test_transitions_are_written_at_once_and_readings_when_enough_wait(journal: FakeJournal) -> None:
    """A commit wears the card; an alarm must not wait for it."""
    keeper = keeper_of(journal)
    keeper.give(batch(1, 2, told=2))
    turn(keeper)
    assert journal.written == [transition(2)[0]]
    assert (keeper.state.pending_s, keeper.state.last_commit_age_s) == (2, None)
    keeper.give(batch(3, 4))
    turn(keeper)
    assert journal.written[1:] == [[1, 2, 3, 4]]
    assert (keeper.state.pending_s, keeper.state.commits, keeper.state.trouble) == (0, 2, "")


def test_readings_are_written_after_some_time_however_few_wait(
    journal: FakeJournal, monkeypatch: pytest.MonkeyPatch
) -> None:
    """A sensor that wakes every ten minutes is not lost for an hour."""
    now_ns = [10**9]
    monkeypatch.setattr(time, "monotonic_ns", lambda: now_ns[0])
    keeper = keeper_of(journal)
    keeper.give(batch(1))
    turn(keeper)
    now_ns[0] += int(COMMIT_S * 1e9) - 1
    turn(keeper)
    assert journal.written == []
    now_ns[0] += 1
    turn(keeper, 2)
    assert journal.written == [[1]]


def test_a_full_disk_is_told_once_and_nothing_is_lost_or_reordered(journal: FakeJournal) -> None:
    """What came meanwhile is written when there is room again, the transitions first."""
    keeper = keeper_of(journal)
    journal.away = True
    with capture_logs() as logs:
        keeper.give(batch(1, 2, 3, 4, 5, told=3))
        turn(keeper, 3)
        keeper.give(batch(6, told=6))
        turn(keeper, 3)
        assert keeper.state.failures == 6
        assert "the journal cannot be written: database or disk is full (check space" in keeper.state.trouble
        journal.away = False
        turn(keeper)
        assert keeper.state.trouble == ""
        turn(keeper)
        assert keeper.finish()
    assert [one["event"] for one in logs] == ["journal_away", "journal_recovered"]
    assert journal.written == [transition(3)[0], [1, 2, 3, 4, 5], transition(6)[0], [6]]
    assert journal.closed


def test_while_the_disk_is_away_memory_stays_bounded(journal: FakeJournal) -> None:
    """Beyond the bound the oldest readings go, and are counted; no transition ever does."""
    keeper = keeper_of(journal)
    bound = keeper.queue.state.bound
    journal.away = True
    with capture_logs():
        keeper.give(batch(1, 2, 3, 4))
        turn(keeper)
        for second in range(5, 5 + bound + 7):
            keeper.give(batch(second, told=second if second == 6 else None))
            turn(keeper)
        assert len(journal.waiting) == 4
        assert keeper.queue.state.length == bound
        assert (keeper.state.dropped_readings, keeper.queue.state.dropped) == (7, 7)
        journal.away = False
        turn(keeper, bound + 1)
        assert keeper.finish()
    found = [second for thing in journal.written if isinstance(thing, list) for second in thing]
    assert found == [1, 2, 3, 4, *range(12, 12 + bound)]
    assert [thing for thing in journal.written if isinstance(thing, Transition)] == [transition(6)[0]]


def test_a_deed_is_written_at_once_and_gets_its_number(journal: FakeJournal) -> None:
    """Who asked waits for it, so that it can be done."""
    keeper = keeper_of(journal)
    with running(keeper):
        assert keeper.note(DEED, PATIENCE_S) == 1
    assert journal.written == [DEED]


def test_a_deed_that_cannot_be_written_is_refused(journal: FakeJournal) -> None:
    """With the disk's own words; it is not written later, when nobody expects it any more."""
    keeper = keeper_of(journal)
    journal.away = True
    with capture_logs(), running(keeper):
        with pytest.raises(sqlite3.OperationalError, match="disk is full"):
            keeper.note(DEED, PATIENCE_S)
        journal.away = False
        assert keeper.note(DEED, PATIENCE_S) == 1
    assert journal.written == [DEED]


def test_a_deed_that_nobody_waits_for_any_more_is_not_written(journal: FakeJournal) -> None:
    """Who was told that it was not done must not find it in the audit."""
    keeper = keeper_of(journal)
    with pytest.raises(TimeoutError):
        keeper.note(DEED, 0.0)
    turn(keeper)
    assert journal.written == []


def test_the_end_writes_all_that_waits(journal: FakeJournal) -> None:
    """Long before a commit is due."""
    keeper = keeper_of(journal)
    keeper.give(batch(1, told=1))
    keeper.give(batch(2))
    assert keeper.finish()
    assert journal.written == [transition(1)[0], [1, 2]]
    assert journal.closed


def test_an_end_without_a_disk_says_what_is_lost(journal: FakeJournal) -> None:
    """It does not hang, and it does not look as if all were well."""
    keeper = keeper_of(journal)
    journal.away = True
    keeper.give(batch(1, 2, told=2))
    with capture_logs() as logs:
        assert not keeper.finish()
    (lost,) = logs
    assert (lost["event"], lost["transitions"], lost["pending_s"], lost["log_level"]) == ("journal_lost", 1, 2, "error")
    assert journal.closed


def test_a_write_ahead_log_that_grows_is_told(journal: FakeJournal) -> None:
    """A program that keeps a read open lets it grow without end, and nothing else tells."""
    keeper = keeper_of(journal)
    path = journal.settings.path
    path.touch()
    with path.with_name("journal.db-wal").open("wb") as log:
        log.truncate(17 * 2**20)
    assert "the write-ahead log has grown to 17 MiB" in keeper.state.trouble
    assert keeper.state.size_bytes == 17 * 2**20


def test_a_disk_that_is_almost_full_is_told_before_it_is(journal: FakeJournal) -> None:
    """Once, while everything is written still."""
    keeper = keeper_of(journal)
    journal.trouble = "little room is left (free some)"
    with capture_logs() as logs:
        turn(keeper, 3)
        assert keeper.state.trouble == "little room is left (free some)"
        journal.trouble = ""
        turn(keeper)
    assert keeper.state.trouble == ""
    assert [one["event"] for one in logs] == ["journal_short_of_room"]
