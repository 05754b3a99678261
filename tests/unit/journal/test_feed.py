"""The feed: one sequence of everything stored, and how far each outlet has got in it."""

import sqlite3
from collections.abc import Iterator
from contextlib import closing

import pytest
from hypothesis import given
from hypothesis import strategies as st

from humbell.journal import Entry, Kind, entries, last_seq
from humbell.journal.feed import append, cursor_of, move_cursor, owe, owed, settle
from humbell.journal.migrate import migrate
from humbell.model import Moment
from unit.journal.given import START_NS

KINDS = [Kind.CHUNKS, Kind.TRANSITION, Kind.AUDIT]
HISTORY = "history"


@pytest.fixture(scope="module")
def made() -> Iterator[sqlite3.Connection]:
    """A journal in memory; what a test adds, it takes back."""
    with closing(sqlite3.connect(":memory:", isolation_level=None)) as connection:
        connection.row_factory = sqlite3.Row
        migrate(connection)
        yield connection


@pytest.fixture
def db(made: sqlite3.Connection) -> Iterator[sqlite3.Connection]:
    """The same, with an open transaction."""
    made.execute("BEGIN")
    yield made
    made.execute("ROLLBACK")


def moment(number: int) -> Moment:
    """Return a moment that can be told from others."""
    return Moment(f"boot-{number % 2}", number, START_NS + number, clock_known=number % 3 > 0)


def fill(db: sqlite3.Connection, count: int) -> list[Entry]:
    """Add *count* entries of all kinds in turn, and return them as they must be read."""
    made = []
    for number in range(count):
        kind = KINDS[number % len(KINDS)]
        seq = append(db, kind, moment(number), "d" * 64)
        made.append(Entry(seq, kind, moment(number), "d" * 64))
    return made


def test_an_empty_feed_ends_at_zero(db: sqlite3.Connection) -> None:
    """So the first number is 1, and a follower that has seen nothing asks for what is after 0."""
    assert last_seq(db) == 0
    assert entries(db, 0) == []
    assert append(db, Kind.AUDIT, moment(0), "") == 1
    assert last_seq(db) == 1


def test_entries_are_read_as_they_were_added(db: sqlite3.Connection) -> None:
    """In order, with kind, both clocks, and the configuration in force."""
    made = fill(db, 7)
    assert entries(db, 0) == made
    assert [entry.seq for entry in made] == list(range(1, 8))


def test_a_range_leaves_out_its_begin_and_keeps_its_end(db: sqlite3.Connection) -> None:
    """So that ranges which follow each other neither repeat nor lose anything."""
    made = fill(db, 9)
    assert entries(db, 3, 6) == made[3:6]
    assert entries(db, 0, 3) + entries(db, 3, 6) + entries(db, 6) == made
    assert entries(db, 9) == entries(db, 6, 6) == []


def test_one_kind_can_be_asked_for(db: sqlite3.Connection) -> None:
    """The alarm lane does not wade through a backlog of readings."""
    made = fill(db, 9)
    assert entries(db, 0, kind=Kind.TRANSITION) == made[1::3]
    assert entries(db, 2, 8, Kind.TRANSITION) == [made[4], made[7]]


def test_a_limit_gives_the_oldest_ones(db: sqlite3.Connection) -> None:
    """A follower takes one batch after the other, each from where the last one ended."""
    made = fill(db, 10)
    found: list[Entry] = []
    while batch := entries(db, found[-1].seq if found else 0, limit=3):
        assert len(batch) <= 3
        found += batch
    assert found == made


def test_a_cursor_begins_at_nothing_and_stays_where_it_was_put(db: sqlite3.Connection) -> None:
    """Each outlet has its own in each lane."""
    assert cursor_of(db, HISTORY, "live") == 0
    move_cursor(db, HISTORY, "live", 4)
    move_cursor(db, HISTORY, "alarm", 9)
    move_cursor(db, "scada", "live", 2)
    move_cursor(db, HISTORY, "live", 6)
    found = [cursor_of(db, outlet, lane) for outlet in (HISTORY, "scada") for lane in ("live", "alarm")]
    assert found == [6, 9, 2, 0]


def test_what_is_owed_is_told_oldest_first(db: sqlite3.Connection) -> None:
    """Each outlet has its own debts."""
    assert owed(db, HISTORY) == []
    owe(db, HISTORY, 30, 40)
    owe(db, HISTORY, 5, 9)
    owe(db, "scada", 1, 100)
    assert owed(db, HISTORY) == [(5, 9), (30, 40)]
    assert owed(db, "scada") == [(1, 100)]


def test_a_debt_named_again_grows_and_never_shrinks(db: sqlite3.Connection) -> None:
    """An outage that goes on has one begin and an ever later end."""
    owe(db, HISTORY, 5, 9)
    owe(db, HISTORY, 5, 12)
    owe(db, HISTORY, 5, 7)
    assert owed(db, HISTORY) == [(5, 12)]


def test_what_is_settled_is_not_owed_any_more(db: sqlite3.Connection) -> None:
    """Whole ranges go, one that was begun starts later, later ones and other outlets stay."""
    for first, last in [(5, 9), (20, 29), (40, 49)]:
        owe(db, HISTORY, first, last)
    owe(db, "scada", 5, 9)
    settle(db, HISTORY, 24)
    assert owed(db, HISTORY) == [(25, 29), (40, 49)]
    settle(db, HISTORY, 28)
    assert owed(db, HISTORY) == [(29, 29), (40, 49)]
    settle(db, HISTORY, 29)
    assert owed(db, HISTORY) == [(40, 49)]
    settle(db, HISTORY, 100)
    assert owed(db, HISTORY) == []
    assert owed(db, "scada") == [(5, 9)]


RANGES = st.tuples(st.integers(1, 20), st.integers(0, 20)).map(lambda pair: (pair[0], pair[0] + pair[1]))


@given(ranges=st.lists(RANGES, max_size=6), up_to=st.integers(0, 45))
def test_settling_takes_the_numbers_up_to_the_one_named_and_no_others(
    made: sqlite3.Connection, ranges: list[tuple[int, int]], up_to: int
) -> None:
    """Whatever ranges there are, overlapping ones too."""
    made.execute("BEGIN")
    for first, last in ranges:
        owe(made, HISTORY, first, last)
    settle(made, HISTORY, up_to)
    found = {number for first, last in owed(made, HISTORY) for number in range(first, last + 1)}
    made.execute("ROLLBACK")
    assert found == {number for first, last in ranges for number in range(first, last + 1) if number > up_to}
