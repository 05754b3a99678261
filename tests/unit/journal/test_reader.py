"""Reading a journal, live or left behind: what touches the time asked for, in the order in which it was stored."""

import sqlite3
from collections.abc import Iterator
from pathlib import Path

import pytest

from humbell.journal import Journal, JournalError, chunks, open_for_reading, readings, transitions
from humbell.journal.reader import ends
from humbell.model import Measure, PointId, Quality, Reading
from unit.journal.given import DE, NDE, SECOND_NS, START_NS, commit, journal, lost, reading, transition

MINUTES = 4


@pytest.fixture
def kept(tmp_path: Path) -> Iterator[Journal]:
    """A journal with four minutes of two points, one commit a minute, open."""
    made = journal(tmp_path)
    made.open()
    for minute in range(MINUTES):
        seconds = range(60 * minute + 1, 60 * minute + 61)
        commit(made, [one for second in seconds for one in (reading(second, second), reading(second, 3.0, NDE))])
    yield made
    made.close()


@pytest.fixture
def connection(kept: Journal) -> Iterator[sqlite3.Connection]:
    """What a reader holds."""
    with open_for_reading(kept.settings.path) as opened:
        yield opened


def at(second: float) -> int:
    """Return a time, UTC ns since 1970."""
    return START_NS + round(second * SECOND_NS)


def seconds(found: Iterator[Reading]) -> list[float]:
    """Return when readings end, seconds after the beginning."""
    return [(one.time_ns - START_NS) / SECOND_NS for one in found]


def test_all_is_read_as_it_was_stored(connection: sqlite3.Connection) -> None:
    """Each point's seconds in order, commit by commit, with the values within their resolution."""
    assert seconds(readings(connection, point=DE)) == list(range(1, 60 * MINUTES + 1))
    assert [one.value for one in readings(connection, point=DE)] == pytest.approx(list(range(1, 241)), rel=5e-4)
    assert {(one.machine, one.point, one.measure) for one in readings(connection)} == {
        (point.machine, point.point, Measure.VELOCITY_RMS) for point in (DE, NDE)
    }
    assert len(list(readings(connection))) == 2 * 60 * MINUTES


def test_a_range_of_values_leaves_out_its_begin_and_keeps_its_end(connection: sqlite3.Connection) -> None:
    """A value stands for the time before it; ranges that follow each other neither repeat nor lose one."""
    assert seconds(readings(connection, at(58), at(62), DE)) == [59, 60, 61, 62]
    bounds = [(0, 80), (80, 160), (160, 240)]
    parts = [seconds(readings(connection, at(first), at(last), DE)) for first, last in bounds]
    assert [second for part in parts for second in part] == list(range(1, 241))
    assert seconds(readings(connection, at(240), point=DE)) == []


def test_chunks_that_touch_the_time_are_told(connection: sqlite3.Connection) -> None:
    """One that ends where the time begins, or begins where it ends, does not touch it."""

    def minutes(first: float, last: float) -> list[float]:
        return [(one.start_ns - START_NS) / 60 / SECOND_NS for one in chunks(connection, at(first), at(last), DE)]

    assert minutes(0, 240) == [0, 1, 2, 3]
    assert minutes(60, 120) == [1]
    assert minutes(59, 121) == [0, 1, 2]
    assert minutes(61, 61.5) == [1]
    assert minutes(240, 1000) == []


def test_a_chunk_tells_its_summary(kept: Journal, connection: sqlite3.Connection) -> None:
    """The numbers of the commit, without the values being unpacked."""
    commit(kept, [reading(301, 3.0, measure=Measure.CREST_FACTOR), lost(302, point=NDE)])
    velocity, crest = chunks(connection, at(300))
    assert (crest.point, crest.measure, crest.start_ns, crest.end_ns) == (DE, Measure.CREST_FACTOR, at(300), at(301))
    assert (crest.good_s, crest.mean_square, crest.maximum, crest.worst) == (1.0, 9.0, 3.0, Quality.GOOD)
    assert (velocity.point, velocity.mean_square, velocity.maximum, velocity.worst) == (NDE, None, None, Quality.BAD)


def test_an_unknown_point_has_nothing(connection: sqlite3.Connection) -> None:
    """Neither values nor an error."""
    assert list(chunks(connection, point=PointId("p-999", "de-h"))) == []


def test_ends_are_looked_for_among_the_points_asked_for(kept: Journal, connection: sqlite3.Connection) -> None:
    """Each point's own, however long ago; those never stored are not there."""
    commit(kept, [reading(241), reading(245, measure=Measure.CREST_FACTOR), reading(242)])
    assert ends(connection, [DE, NDE, PointId("p-999", "de-h")]) == {DE: at(245), NDE: at(240)}
    assert ends(connection, [NDE]) == {NDE: at(240)}
    assert ends(connection, []) == {}


def test_ends_are_found_without_looking_through_the_whole_past(kept: Journal, connection: sqlite3.Connection) -> None:
    """A start must not take longer with every month."""
    for second in range(241, 260):
        commit(kept, [reading(second), reading(second, point=NDE)])
    steps = 0

    def count() -> int:
        nonlocal steps
        steps += 1
        return 0

    connection.set_progress_handler(count, 1)
    assert set(ends(connection, [DE, NDE]).values()) == {at(259)}
    few, steps = steps, 0
    list(chunks(connection))
    assert few < steps / 3


def test_a_reader_cannot_change_anything(kept: Journal) -> None:
    """Whoever looks at a journal does not touch it."""
    kept.tell(*transition(1))
    with pytest.raises(JournalError, match="readonly"), open_for_reading(kept.settings.path) as connection:
        connection.execute("DELETE FROM transition")
    with open_for_reading(kept.settings.path) as connection:
        assert len(transitions(connection)) == 1


def test_a_reader_sees_one_state_while_the_writer_goes_on(tmp_path: Path) -> None:
    """Neither waits for the other; the next look sees what was committed meanwhile."""
    kept = journal(tmp_path)
    kept.open()
    kept.tell(*transition(1))
    with open_for_reading(kept.settings.path) as connection:
        connection.execute("BEGIN")
        assert len(transitions(connection)) == 1
        kept.tell(*transition(2))
        commit(kept, [reading(1)])
        assert len(transitions(connection)) == 1
        connection.execute("ROLLBACK")
        assert len(transitions(connection)) == 2
    kept.close()


def test_a_missing_journal_is_told_with_what_to_do(tmp_path: Path) -> None:
    """And none is made by looking for it."""
    with (
        pytest.raises(JournalError, match=r"there is no journal \(check journal.path, or start humbell run\)"),
        open_for_reading(tmp_path / "journal.db"),
    ):
        pass
    assert list(tmp_path.iterdir()) == []


def test_any_path_can_be_read(tmp_path: Path) -> None:
    """Signs that mean something in an address mean nothing in a path."""
    folder = tmp_path / "a?mode=rw#b%20c"
    left = journal(folder)
    left.open()
    left.tell(*transition(1))
    left.close()
    with open_for_reading(left.settings.path) as connection:
        assert len(transitions(connection)) == 1


def test_a_file_of_something_else_is_told(tmp_path: Path) -> None:
    """Looking at the wrong file is a mistake of the one who looks."""
    path = tmp_path / "journal.db"
    path.write_bytes(b"no journal at all")
    with (
        pytest.raises(JournalError, match=r"file is not a database \(is it one of this version"),
        open_for_reading(path) as connection,
    ):
        transitions(connection)
