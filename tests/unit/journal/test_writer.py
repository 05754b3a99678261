"""The writer: what is committed at once, what waits, what a restart finds, and what a failed write costs: nothing."""

import sqlite3
from collections.abc import Callable, Iterator
from contextlib import closing, contextmanager
from dataclasses import replace
from itertools import pairwise
from pathlib import Path

import numpy as np
import pytest

from humbell.journal import (
    Journal,
    JournalError,
    alarms,
    chunks,
    deeds,
    entries,
    last_seq,
    open_for_reading,
    readings,
    totals,
    transitions,
    writer,
)
from humbell.journal import db as module
from humbell.model import Measure, Moment, PointId, Reading
from unit.journal.given import (
    ALARM,
    DE,
    DEED,
    NDE,
    SECOND_NS,
    START_NS,
    WATCHED,
    Clock,
    commit,
    journal,
    lost,
    reading,
    transition,
)


@contextmanager
def held(kept: Journal) -> Iterator[None]:
    """Let another program write to the journal, for longer than the journal waits."""
    with closing(sqlite3.connect(kept.settings.path, isolation_level=None)) as other:
        other.execute("BEGIN IMMEDIATE")
        yield


@pytest.fixture
def limit_pages(monkeypatch: pytest.MonkeyPatch) -> Callable[[int], None]:
    """Set how many pages more than now the file may have, as a full disk does."""
    made: list[sqlite3.Connection] = []
    real = module.open_for_writing

    def keep(path: Path) -> tuple[sqlite3.Connection, Path | None]:
        connection, aside = real(path)
        made.append(connection)
        return connection, aside

    def limit(more: int) -> None:
        (pages,) = made[-1].execute("PRAGMA page_count").fetchone()
        made[-1].execute(f"PRAGMA max_page_count = {pages + more}")

    monkeypatch.setattr(writer, "open_for_writing", keep)
    return limit


def count(kept: Journal) -> tuple[int, int, int]:
    """Return how many transitions, readings and deeds a reader sees."""
    with open_for_reading(kept.settings.path) as connection:
        return len(transitions(connection)), len(list(readings(connection))), len(deeds(connection))


def test_a_transition_counts_at_once(kept: Journal) -> None:
    """A reader sees it, as it was told, before anything else is committed."""
    told, state = transition(1)
    kept.add(reading(1))
    number = kept.tell(told, state)
    assert count(kept) == (1, 0, 0)
    with open_for_reading(kept.settings.path) as connection:
        (stored,) = transitions(connection)
    assert (stored.seq, stored.transition) == (number, told)


def test_a_deed_counts_at_once(kept: Journal, clock: Clock) -> None:
    """Who, where from, what, on what, why, what came of it; and when, on both clocks."""
    clock.now = Moment("boot-7", 1234, START_NS + 5, clock_known=False)
    number = kept.note(DEED)
    with open_for_reading(kept.settings.path) as connection:
        assert deeds(connection) == [(number, clock.now, DEED)]


def test_readings_count_once_they_are_committed(kept: Journal, clock: Clock) -> None:
    """Until then they wait, and nothing of them is seen."""
    for second in (1, 2, 3):
        kept.add(reading(second))
    assert kept.pending_s == 3.0
    assert (count(kept), kept.last_commit) == ((0, 0, 0), None)
    assert kept.commit({}) == 3
    assert count(kept) == (0, 3, 0)
    assert (kept.pending_s, kept.last_commit, kept.commits) == (0.0, clock.now, 1)


def test_where_nothing_waits_nothing_is_written(kept: Journal) -> None:
    """An idle node wears nothing."""
    assert kept.commit({ALARM: transition(1)[1]}) == 0
    with open_for_reading(kept.settings.path) as connection:
        assert last_seq(connection) == 0


def test_single_values_are_kept_of_the_measures_that_were_asked_for(kept: Journal) -> None:
    """Of the others there is the summary."""
    commit(kept, [reading(1), reading(1, measure=Measure.CREST_FACTOR)])
    with open_for_reading(kept.settings.path) as connection:
        found = {chunk.measure: chunk.readings is not None for chunk in chunks(connection)}
    assert found == {Measure.VELOCITY_RMS: True, Measure.CREST_FACTOR: False}


def test_numbers_only_grow(kept: Journal) -> None:
    """Over transitions, deeds, readings and restarts: none is used twice, none goes back."""
    numbers: list[int] = []
    for start in range(3):
        for turn in range(3):
            numbers.append(kept.tell(*transition(turn)))
            numbers.append(kept.note(DEED))
            commit(kept, [reading(10 * start + turn)])
            with open_for_reading(kept.settings.path) as connection:
                numbers.append(last_seq(connection))
        kept.close()
        kept.open()
    assert all(before < after for before, after in pairwise(numbers))
    with open_for_reading(kept.settings.path) as connection:
        assert [entry.seq for entry in entries(connection, 0)] == numbers


def test_each_entry_says_when_and_under_which_configuration_it_was_made(kept: Journal, clock: Clock) -> None:
    """A restart with other settings begins to mark with those; both texts stay."""
    kept.tell(*transition(1))
    kept.close()
    clock.now = Moment("boot-2", 7, START_NS + 7)
    later = replace(WATCHED, digest="e" * 64, content="site: tarnholm-water-2")
    again = journal(kept.settings.path.parent, later, clock)
    again.open()
    again.note(DEED)
    with open_for_reading(kept.settings.path) as connection:
        found = [(entry.kind, entry.moment.boot, entry.configuration) for entry in entries(connection, 0)]
        texts = [tuple(row) for row in connection.execute("SELECT digest, content FROM configuration ORDER BY digest")]
        boots = [tuple(row) for row in connection.execute("SELECT boot, mono_ns, utc_ns FROM boot")]
    assert found == [("transition", "boot-1", "d" * 64), ("audit", "boot-2", "e" * 64)]
    assert texts == [("d" * 64, WATCHED.content), ("e" * 64, later.content)]
    assert boots == [("boot-1", 0, START_NS), ("boot-2", 7, START_NS + 7)]
    again.close()


def test_a_restart_learns_up_to_where_each_point_is_committed(kept: Journal) -> None:
    """The later one of a point's measures counts; what was not committed does not; unknown points are not there."""
    kept.close()
    other = PointId("p-102", "de-h")
    watched = replace(WATCHED, counted={**WATCHED.counted, other: Measure.VELOCITY_RMS})
    kept = journal(kept.settings.path.parent, watched)
    assert kept.open().ends_ns == {}
    commit(kept, [reading(5, point=NDE)])
    commit(
        kept, [reading(1), reading(2), reading(3, measure=Measure.CREST_FACTOR), reading(1, point=PointId("x", "y"))]
    )
    for second in range(4, 9):
        kept.add(reading(second))
    kept.close()
    assert kept.open().ends_ns == {DE: START_NS + 3 * SECOND_NS, NDE: START_NS + 5 * SECOND_NS}
    kept.close()


def test_after_a_clock_that_was_ahead_the_newest_readings_count(kept: Journal) -> None:
    """A time two weeks away, once stored, must not hide the gap of the next restart."""
    commit(kept, [reading(14 * 86_400)])
    commit(kept, [reading(60)])
    kept.close()
    assert kept.open().ends_ns == {DE: START_NS + 60 * SECOND_NS}


def test_what_cannot_be_written_goes_on_waiting(kept: Journal, monkeypatch: pytest.MonkeyPatch) -> None:
    """Readings, transitions and deeds are told as failed, nothing of them is there, and later all of them are."""
    kept.close()
    monkeypatch.setattr(module, "_BUSY_MS", 20)
    kept.open()
    commit(kept, [reading(1)])
    kept.add(reading(2))
    with held(kept):
        with pytest.raises(sqlite3.OperationalError, match="locked"):
            kept.commit({})
        with pytest.raises(sqlite3.OperationalError, match="locked"):
            kept.tell(*transition(1))
        with pytest.raises(sqlite3.OperationalError, match="locked"):
            kept.note(DEED)
        kept.add(reading(3))
    assert count(kept) == (0, 1, 0)
    assert kept.commit({}) == 2
    kept.tell(*transition(1))
    kept.note(DEED)
    assert count(kept) == (1, 3, 1)
    with open_for_reading(kept.settings.path) as connection:
        assert [one.time_ns for one in readings(connection)] == [START_NS + n * SECOND_NS for n in (1, 2, 3)]
        assert sum(entry.seconds for entry in totals(connection)[DE].values()) == 3.0


def test_what_fails_half_way_is_undone(kept: Journal, monkeypatch: pytest.MonkeyPatch) -> None:
    """Whatever it fails at: nothing of it is there, and the next write is a whole one."""
    with monkeypatch.context() as patch:
        patch.setattr(alarms, "checkpoint", lambda *_: [].pop())
        with pytest.raises(IndexError):
            commit(kept, [reading(1)])
    kept.tell(*transition(1))
    assert count(kept) == (1, 0, 0)
    assert kept.commit({}) == 1
    assert count(kept) == (1, 1, 0)


def noise(first: int, count: int) -> list[Reading]:
    """Return *count* readings from second *first* on, which no compression makes small."""
    values = np.random.default_rng(first).uniform(1, 100, count)
    return [reading(second, float(value)) for second, value in enumerate(values, first)]


def test_a_full_disk_costs_nothing_but_time(tmp_path: Path, limit_pages: Callable[[int], None]) -> None:
    """With nothing old to give up, all readings wait, those of points without a number too; then they are written."""
    kept = journal(tmp_path)
    kept.open()
    limit_pages(0)
    for first in (1, 3001):
        for one in noise(first, 3000):
            kept.add(one)
        with pytest.raises(sqlite3.OperationalError, match="full"):
            kept.commit({})
    assert count(kept) == (0, 0, 0)
    limit_pages(1000)
    assert kept.commit({}) == 6000
    assert count(kept) == (0, 6000, 0)
    kept.close()


def test_a_full_disk_costs_the_oldest_values_and_nothing_else(
    tmp_path: Path, limit_pages: Callable[[int], None]
) -> None:
    """Transitions, deeds, new readings and the summaries of the old ones are there as ever."""
    kept = journal(tmp_path)
    kept.open()
    for turn in range(30):
        commit(kept, noise(1000 * turn, 1000))
    limit_pages(0)
    for number in range(60):
        kept.tell(*transition(number))
        kept.note(DEED)
    commit(kept, [reading(30_001)])
    with open_for_reading(kept.settings.path) as connection:
        assert len(transitions(connection)) == len(deeds(connection)) == 60
        stored = list(chunks(connection))
    assert [chunk.readings is None for chunk in stored] == [True] * 30 + [False]
    kept.close()


def test_a_journal_that_another_program_writes_to_is_told_at_the_start(
    kept: Journal, monkeypatch: pytest.MonkeyPatch
) -> None:
    """It is not put aside, and can be opened once the other one has ended."""
    kept.close()
    monkeypatch.setattr(module, "_BUSY_MS", 20)
    with held(kept), pytest.raises(JournalError, match=r"locked \(.*what else has it open"):
        kept.open()
    assert kept.open().put_aside is None


def test_a_damaged_journal_is_told_at_the_start(kept: Journal) -> None:
    """Whoever starts the service learns where the old one is."""
    kept.close()
    kept.settings.path.write_bytes(b"no journal at all")
    assert kept.open().put_aside == kept.settings.path.with_name("journal.db.damaged-1")


def test_a_closed_journal_takes_nothing_and_forgets_nothing(kept: Journal) -> None:
    """What was added before it is opened is there once it is."""
    kept.close()
    kept.add(lost(1))
    with pytest.raises(sqlite3.ProgrammingError, match="not open"):
        kept.commit({})
    kept.open()
    assert kept.commit({}) == 1
