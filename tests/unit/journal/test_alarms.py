"""Alarms in the journal: every transition as it was told, and after a restart every state as it was."""

import math
import sqlite3
import zlib
from collections.abc import Iterator
from contextlib import closing
from dataclasses import fields, replace
from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st

from humbell.alarms import AlarmState, LimitState
from humbell.journal import alarms as module
from humbell.journal import states, transitions
from humbell.journal.migrate import migrate
from humbell.model import AlarmId, AlarmType, LifeCycle, Measure, Transition
from unit.journal.given import ALARM, journal, reading, transition

OTHER = AlarmId("p-102", "nde-v", Measure.ACCELERATION_RMS, AlarmType.HIGH_HIGH)
FULL = AlarmState(
    life_cycle=LifeCycle.RETURNED_UNACKNOWLEDGED,
    verified=True,
    limit=LimitState(up=True, counted=7.25),
    blind=1.5,
    occurrence="velocity_rms.high@7",
    last_ns=1_772_359_207_000_000_001,
)
NUMBERS = st.floats(0, 1e9)
STATES = st.builds(
    AlarmState,
    life_cycle=st.sampled_from(LifeCycle),
    verified=st.booleans(),
    limit=st.builds(LimitState, up=st.booleans(), counted=NUMBERS),
    blind=NUMBERS,
    occurrence=st.none() | st.text(st.characters(exclude_categories=["Cs", "Cc"])),
    last_ns=st.integers(0, 2**62),
)
IDS = st.builds(
    AlarmId,
    machine=st.sampled_from(["p-101", "p-102"]),
    point=st.sampled_from(["de-h", "de-v"]),
    measure=st.sampled_from(Measure),
    type=st.sampled_from(AlarmType),
)


@pytest.fixture(scope="module")
def connection() -> Iterator[sqlite3.Connection]:
    """A journal in memory; what a test adds, it takes back."""
    with closing(sqlite3.connect(":memory:", isolation_level=None)) as made:
        made.row_factory = sqlite3.Row
        migrate(made)
        yield made


@pytest.fixture
def db(connection: sqlite3.Connection) -> Iterator[sqlite3.Connection]:
    """The same, with an open transaction."""
    connection.execute("BEGIN")
    yield connection
    connection.execute("ROLLBACK")


def test_every_field_of_a_state_survives(db: sqlite3.Connection) -> None:
    """In a checkpoint and beside a transition; a field that is new must be tried here with a value of its own."""
    assert all(getattr(FULL, one.name) != getattr(AlarmState(), one.name) for one in fields(AlarmState))
    assert all(getattr(FULL.limit, one.name) != getattr(LimitState(), one.name) for one in fields(LimitState))
    module.checkpoint(db, 1, 0, {ALARM: FULL, OTHER: AlarmState()})
    assert states(db) == {ALARM: FULL, OTHER: AlarmState()}
    told, _ = transition(1, OTHER)
    module.store(db, 2, told, replace(FULL, blind=2.5))
    assert states(db) == {ALARM: FULL, OTHER: replace(FULL, blind=2.5)}


@given(checkpointed=st.dictionaries(IDS, STATES), later=st.lists(st.tuples(IDS, STATES), max_size=6))
def test_a_restart_finds_the_last_committed_states(
    connection: sqlite3.Connection, checkpointed: dict[AlarmId, AlarmState], later: list[tuple[AlarmId, AlarmState]]
) -> None:
    """The checkpoint's, and over it those of the transitions since; those before it are in it already."""
    connection.execute("BEGIN")
    module.store(connection, 1, transition(1)[0], AlarmState(occurrence="older than the checkpoint"))
    module.checkpoint(connection, 2, 0, checkpointed)
    for seq, (alarm, state) in enumerate(later, 3):
        module.store(connection, seq, transition(seq, alarm)[0], state)
    found = states(connection)
    connection.execute("ROLLBACK")
    assert found == checkpointed | dict(later)


def test_before_the_first_checkpoint_the_transitions_alone_count(db: sqlite3.Connection) -> None:
    """An alarm in the first minute after the first start is not forgotten by a power cut."""
    assert states(db) == {}
    for seq in (1, 2):
        module.store(db, seq, *transition(seq))
    assert states(db) == {ALARM: transition(2)[1]}


def test_with_a_damaged_checkpoint_the_transitions_alone_count(db: sqlite3.Connection) -> None:
    """A start goes on, whatever stands there: alarms stay raised, timers begin anew."""
    module.store(db, 1, *transition(1))
    module.checkpoint(db, 2, 0, {ALARM: FULL, OTHER: FULL})
    (blob,) = db.execute("SELECT states FROM checkpoint").fetchone()
    for damaged in (b"", blob[:-9], b"\xff" + blob[1:], zlib.compress(b"[[")):
        db.execute("UPDATE checkpoint SET states = ?", (damaged,))
        assert states(db) == {ALARM: transition(1)[1]}


@pytest.mark.parametrize("before", LifeCycle)
@pytest.mark.parametrize("after", LifeCycle)
def test_a_transition_is_read_as_it_was_told(after: LifeCycle, before: LifeCycle, db: sqlite3.Connection) -> None:
    """From any state to any other, of any alarm, verified or not."""
    told = replace(transition(1, OTHER)[0], before=before, after=after, verified=False, occurrence=None)
    module.store(db, 4, told, FULL)
    (found,) = transitions(db)
    assert (found.seq, found.transition) == (4, told)


def test_a_transition_that_no_value_brought_has_none(db: sqlite3.Connection) -> None:
    """Lost data and an acknowledgement bring no value; none is made up."""
    module.store(db, 1, replace(transition(1)[0], value=math.nan), FULL)
    assert math.isnan(transitions(db)[0].transition.value)


def test_the_newest_transitions_are_told_oldest_first(db: sqlite3.Connection) -> None:
    """As many as were asked for, and none up to the number that the asker has seen."""
    told: list[Transition] = []
    for seq in range(1, 8):
        module.store(db, seq, *transition(seq))
        told.append(transition(seq)[0])
    assert [one.transition for one in transitions(db)] == told
    assert [one.seq for one in transitions(db, limit=3)] == [5, 6, 7]
    assert [one.seq for one in transitions(db, after=5)] == [6, 7]


def test_states_survive_a_restart_of_the_journal(tmp_path: Path) -> None:
    """Opened again, it tells the last commit's timers and the transition behind it."""
    kept = journal(tmp_path)
    assert kept.open().states == {}
    kept.tell(*transition(1))
    kept.add(reading(1))
    kept.commit({ALARM: FULL, OTHER: FULL})
    told, state = transition(2, OTHER)
    kept.tell(told, state)
    kept.close()
    assert kept.open().states == {ALARM: FULL, OTHER: state}
    kept.close()
