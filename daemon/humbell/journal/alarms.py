"""Alarms in the journal: transitions for ever, and the states from which a restart goes on."""

import contextlib
import json
import math
import sqlite3
import zlib
from collections.abc import Mapping
from dataclasses import asdict, dataclass

from humbell.alarms import AlarmState, LimitState
from humbell.model import AlarmId, AlarmType, LifeCycle, Measure, Transition


@dataclass(frozen=True, slots=True)
class Stored:
    """
    A transition as it is in the journal.

    Args:
        seq: its number in the feed.

        transition: what it says.
    """

    seq: int
    transition: Transition


def store(connection: sqlite3.Connection, seq: int, transition: Transition, state: AlarmState) -> None:
    """Add *transition* and the *state* that it leads to, to the open transaction."""
    alarm = transition.alarm
    connection.execute(
        "INSERT INTO transition VALUES (?, ?, ?, ?, ?, ?, ?, ?, ?, ?, ?, ?, ?)",
        (
            seq,
            transition.time_ns,
            alarm.machine,
            alarm.point,
            alarm.measure,
            alarm.type,
            transition.before,
            transition.after,
            transition.verified,
            transition.value if math.isfinite(transition.value) else None,
            transition.limit,
            transition.occurrence,
            json.dumps(asdict(state)),
        ),
    )


def checkpoint(connection: sqlite3.Connection, seq: int, time_ns: int, states: Mapping[AlarmId, AlarmState]) -> None:
    """Replace the checkpoint, in the open transaction, by the *states* as they are at *seq*."""
    rows = [[*_key(alarm), asdict(state)] for alarm, state in sorted(states.items())]
    connection.execute(
        "INSERT INTO checkpoint VALUES (1, ?, ?, ?) ON CONFLICT DO UPDATE "
        "SET seq = excluded.seq, time_ns = excluded.time_ns, states = excluded.states",
        (seq, time_ns, zlib.compress(json.dumps(rows).encode())),
    )


def states(connection: sqlite3.Connection) -> dict[AlarmId, AlarmState]:
    """
    Return the last committed state of every alarm: the checkpoint, and what transitions changed since.

    Where the checkpoint is damaged, transitions alone tell it, and timers begin anew.
    """
    row = connection.execute("SELECT seq, states FROM checkpoint").fetchone()
    since, found = 0, {}
    if row is not None:
        # SQLite's check sees whether pages hang together, not what stands in them.
        with contextlib.suppress(zlib.error, ValueError):
            since, found = row["seq"], _checkpoint(row["states"])
    for later in connection.execute("SELECT * FROM transition WHERE seq > ? ORDER BY seq", (since,)):
        found[_alarm(later)] = _state(json.loads(later["state"]))
    return found


def transitions(connection: sqlite3.Connection, after: int = 0, limit: int = 1000) -> list[Stored]:
    """Return the newest *limit* transitions with numbers above *after*, oldest first."""
    rows = connection.execute("SELECT * FROM transition WHERE seq > ? ORDER BY seq DESC LIMIT ?", (after, limit))
    return [Stored(row["seq"], _transition(row)) for row in reversed(rows.fetchall())]


def _checkpoint(blob: bytes) -> dict[AlarmId, AlarmState]:
    return {
        AlarmId(machine, point, Measure(measure), AlarmType(kind)): _state(state)
        for machine, point, measure, kind, state in json.loads(zlib.decompress(blob))
    }


def _key(alarm: AlarmId) -> tuple[str, str, str, str]:
    return alarm.machine, alarm.point, str(alarm.measure), str(alarm.type)


def _alarm(row: sqlite3.Row) -> AlarmId:
    return AlarmId(row["machine"], row["point"], Measure(row["measure"]), AlarmType(row["type"]))


def _transition(row: sqlite3.Row) -> Transition:
    return Transition(
        time_ns=row["time_ns"],
        alarm=_alarm(row),
        before=LifeCycle(row["before"]),
        after=LifeCycle(row["after"]),
        verified=bool(row["verified"]),
        value=math.nan if row["value"] is None else row["value"],
        limit=row["limit_value"],
        occurrence=row["occurrence"],
    )


def _state(fields: dict[str, object]) -> AlarmState:
    limit = fields["limit"]
    if not isinstance(limit, dict):
        raise TypeError("a stored alarm state has no limit state")
    rest = {key: value for key, value in fields.items() if key not in {"limit", "life_cycle"}}
    return AlarmState(life_cycle=LifeCycle(str(fields["life_cycle"])), limit=LimitState(**limit), **rest)  # type: ignore[arg-type]  # as stored
