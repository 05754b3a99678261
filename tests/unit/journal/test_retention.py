"""What is kept when: hourly roll-ups that agree with the values, and one-second values until the size is reached."""

import math
import sqlite3
from collections.abc import Iterator
from contextlib import closing, contextmanager
from dataclasses import replace
from itertools import pairwise
from pathlib import Path

import numpy as np
import pytest

from humbell.journal import (
    Journal,
    JournalSettings,
    chunks,
    deeds,
    open_for_reading,
    retention,
    totals,
    transitions,
)
from humbell.journal.chunks import SERIES
from humbell.journal.migrate import migrate
from humbell.model import Cause, Measure, PointId, Quality, Reading
from unit.journal.given import (
    DE,
    DEED,
    HOUR_NS,
    NDE,
    SECOND_NS,
    START_NS,
    WATCHED,
    Clock,
    lost,
    reading,
    transition,
)

QUALITIES = list(Quality)
Hour = tuple[float, float | None, float | None, int]


def live(kept: Journal, clock: Clock, readings: list[Reading], commit_s: float = 300.0) -> None:
    """Commit *readings*, which are in order of time, as they come, every *commit_s* seconds."""
    begin_ns = readings[0].time_ns
    for one in readings:
        if one.time_ns - begin_ns >= commit_s * SECOND_NS:
            begin_ns = one.time_ns
            clock.now = replace(clock.now, utc_ns=one.time_ns)
            kept.commit({})
        kept.add(one)
    clock.now = replace(clock.now, utc_ns=readings[-1].time_ns)
    kept.commit({})


@contextmanager
def database() -> Iterator[sqlite3.Connection]:
    """Open an empty journal in memory, with an open transaction."""
    with closing(sqlite3.connect(":memory:", isolation_level=None)) as connection:
        connection.row_factory = sqlite3.Row
        migrate(connection)
        connection.execute("BEGIN")
        yield connection


def hours(kept: Journal) -> dict[tuple[int, PointId, Measure], Hour]:
    """Return the roll-ups: hours after the beginning, point and measure; seconds, mean square, maximum, quality."""
    with open_for_reading(kept.settings.path) as connection:
        rows = connection.execute(
            "SELECT h.*, measure, machine, p.point FROM hour h "
            "JOIN series s ON s.id = h.series JOIN point p ON p.id = s.point"
        ).fetchall()
    return {
        ((row["start_ns"] - START_NS) // HOUR_NS, PointId(row["machine"], row["point"]), Measure(row["measure"])): (
            row["good_s"],
            row["mean_square"],
            row["maximum"],
            row["worst"],
        )
        for row in rows
    }


def numbers(kept: Journal) -> list[int]:
    """Return the hours that have a roll-up."""
    return sorted({hour for hour, _, _ in hours(kept)})


def every_ten_seconds(first_s: int, last_s: int, point: PointId = DE) -> list[Reading]:
    """Return readings of one second each, every ten seconds."""
    return [reading(second, 2.0, point) for second in range(first_s + 10, last_s + 1, 10)]


def test_roll_ups_equal_what_the_values_give(kept: Journal, clock: Clock) -> None:
    """Seconds, mean square and maximum by NumPy from the values; nothing of the hour that has not ended."""
    random = np.random.default_rng(3)
    made: list[Reading] = []
    for second in range(10, 3 * 3600 + 1800, 10):
        for point in (DE, NDE):
            for measure in (Measure.VELOCITY_RMS, Measure.CREST_FACTOR):
                one = reading(second, float(random.lognormal()), point, measure=measure, span_s=random.uniform(1, 9))
                if random.random() < 0.2:
                    one = replace(one, cause=Cause.CLIPPED, quality=Quality.UNCERTAIN)
                elif random.random() < 0.2:
                    one = replace(one, cause=Cause.NO_SAMPLES, quality=Quality.BAD, value=math.nan)
                made.append(one)
    live(kept, clock, made)
    found = hours(kept)
    assert set(found) == {
        (hour, point, measure)
        for hour in range(3)
        for point in (DE, NDE)
        for measure in (Measure.VELOCITY_RMS, Measure.CREST_FACTOR)
    }
    # A commit belongs to the hour in which it begins.
    with open_for_reading(kept.settings.path) as connection:
        bounds = [(chunk.point, chunk.measure, chunk.start_ns, chunk.end_ns) for chunk in chunks(connection)]
    for (hour, point, measure), (good_s, mean_square, maximum, worst) in found.items():
        spans = [
            (start_ns, end_ns)
            for whose, what, start_ns, end_ns in bounds
            if (whose, what) == (point, measure) and (start_ns - START_NS) // HOUR_NS == hour
        ]
        values = [
            one
            for one in made
            if (one.point, one.measure) == (point.point, measure)
            and any(start_ns < one.time_ns <= end_ns for start_ns, end_ns in spans)
        ]
        good = [one for one in values if one.quality is Quality.GOOD]
        assert good_s == pytest.approx(np.sum([one.span_s for one in good]), rel=1e-9)
        assert mean_square == pytest.approx(
            np.average(np.square([one.value for one in good]), weights=[one.span_s for one in good]), rel=1e-9
        )
        assert maximum == np.nanmax([one.value for one in values])
        assert QUALITIES[worst] is Quality.BAD


def test_an_hour_without_a_good_value_has_no_mean(kept: Journal, clock: Clock) -> None:
    """It is there, says that nothing was measured, and is no zero."""
    live(kept, clock, [lost(second, 10.0) for second in range(10, 7200, 10)])
    assert hours(kept) == {(0, DE, Measure.VELOCITY_RMS): (0.0, None, None, QUALITIES.index(Quality.BAD))}


def test_an_hour_is_rolled_up_once_late_readings_are_there(kept: Journal, clock: Clock) -> None:
    """A source that lags by minutes still gets its last readings into the hour."""
    live(kept, clock, every_ten_seconds(0, 4000))
    assert numbers(kept) == []
    live(kept, clock, every_ten_seconds(3000, 3500, NDE))
    live(kept, clock, every_ten_seconds(4000, 4600))
    assert numbers(kept) == [0]
    assert hours(kept)[0, NDE, Measure.VELOCITY_RMS][0] == 50.0


def test_after_a_pause_the_hours_before_and_after_it_are_there(kept: Journal, clock: Clock) -> None:
    """A restart in the middle of an hour changes nothing; an hour without readings has no roll-up."""
    live(kept, clock, every_ten_seconds(0, 5400))
    kept.close()
    kept.open()
    live(kept, clock, every_ten_seconds(5400, 6000))
    kept.close()
    kept.open()
    live(kept, clock, every_ten_seconds(5 * 3600, 7 * 3600))
    assert numbers(kept) == [0, 1, 5]
    assert hours(kept)[1, DE, Measure.VELOCITY_RMS][0] == 240.0


def test_a_clock_that_was_ahead_does_not_stop_the_roll_ups(kept: Journal, clock: Clock) -> None:
    """Two weeks ahead for some hours, then right again: the hours since are rolled up as ever."""
    live(kept, clock, every_ten_seconds(0, 8000))
    ahead = 14 * 24 * 3600
    live(kept, clock, every_ten_seconds(8000 + ahead, 16_000 + ahead))
    live(kept, clock, every_ten_seconds(16_000, 25_200))
    assert [hour for hour in numbers(kept) if hour < 24] == [0, 1, 2, 4, 5]


def test_a_roll_up_does_not_look_through_the_whole_past() -> None:
    """After a year of minutes it takes no longer than after a day: transitions wait for it."""
    minutes = 100_000
    times = [START_NS + minute * 60 * SECOND_NS for minute in range(minutes + 1)]
    with database() as connection:
        connection.executemany("INSERT INTO feed VALUES (?, 'chunks', '', 0, ?, 1, '')", list(enumerate(times[1:], 1)))
        connection.executemany(
            "INSERT INTO chunk VALUES (?, ?, ?, 60, 4, 2, 0)",
            [(seq * SERIES, start_ns, end_ns) for seq, (start_ns, end_ns) in enumerate(pairwise(times), 1)],
        )
        retention.roll_up(connection, times[-61])
        steps = 0

        def count() -> int:
            nonlocal steps
            steps += 1000
            return 0

        connection.set_progress_handler(count, 1000)
        retention.roll_up(connection, times[-1])
        found = connection.execute("SELECT count(*) FROM hour").fetchone()[0]
    assert found == minutes // 60
    assert steps < minutes / 5


def fill(connection: sqlite3.Connection, count: int, size: int = 2000) -> None:
    """Store *count* blobs of values with numbers from 1 on."""
    connection.executemany(
        "INSERT INTO chunk_values VALUES (?, randomblob(?))", [(number, size) for number in range(1, count + 1)]
    )


def stored(connection: sqlite3.Connection) -> list[int]:
    """Return the numbers of the values that are left."""
    return [number for (number,) in connection.execute("SELECT id FROM chunk_values ORDER BY id")]


def used_bytes(connection: sqlite3.Connection) -> int:
    """Return the size of all pages that are in use."""
    (pages,), (free,) = (connection.execute(f"PRAGMA {name}").fetchone() for name in ("page_count", "freelist_count"))
    return int(4096 * (pages - free))


def test_below_the_cap_nothing_is_shed() -> None:
    """A megabyte is a megabyte."""
    with database() as connection:
        fill(connection, 400)
        assert used_bytes(connection) < 2**20
        assert retention.shed(connection, 1) == 0
        assert len(stored(connection)) == 400


def test_beyond_the_cap_a_lot_of_the_oldest_values_is_shed() -> None:
    """The newest ones stay, and what was shed gives whole pages back."""
    with database() as connection:
        fill(connection, 5000)
        before = used_bytes(connection)
        assert retention.shed(connection, 1) == 2000
        assert stored(connection) == list(range(2001, 5001))
        assert used_bytes(connection) < 0.62 * before


def test_on_a_full_disk_some_of_the_oldest_values_become_free_pages() -> None:
    """The file need not grow then; with enough of them nothing more is shed, and without values nothing can be."""
    with database() as connection:
        fill(connection, 1000)
        assert retention.shed(connection, 1000, 128) == 320
        assert stored(connection) == list(range(321, 1001))
        assert retention.shed(connection, 1000, 128) == 0
        assert [retention.shed(connection, 1000, 100_000) for _ in range(4)] == [320, 320, 40, 0]


def test_the_journal_stays_near_its_cap_and_keeps_all_but_old_values(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """After twice the cap: every summary, transition, deed and second of coverage, and the newest values."""
    monkeypatch.setattr(retention, "_LOT", 10)
    cap = JournalSettings(path=tmp_path / "journal.db").model_copy(update={"max_mib": 0.3})
    kept = Journal(cap, WATCHED, Clock())
    kept.open()
    random = np.random.default_rng(1)
    largest, at_s = 0, 0.0
    for turn in range(130):
        for value, span_s in random.uniform(1, 2, (400, 2)).tolist():
            at_s += span_s
            kept.add(reading(at_s, value, span_s=span_s))
        kept.commit({})
        kept.tell(*transition(turn))
        kept.note(DEED)
        largest = max(largest, cap.path.stat().st_size)
    with open_for_reading(cap.path) as connection:
        found = list(chunks(connection))
        assert len(transitions(connection)) == len(deeds(connection)) == len(found) == 130
        seconds = [entry.seconds for entry in totals(connection)[DE].values()]
    kept.close()
    assert largest < 1.2 * cap.max_mib * 2**20
    assert seconds == [pytest.approx(at_s)]
    assert sum(chunk.good_s for chunk in found) == pytest.approx(at_s)
    shed = [chunk.readings is None for chunk in found]
    assert shed == sorted(shed, reverse=True)
    assert 30 < sum(shed) < 120
