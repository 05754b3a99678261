"""The one sequence of everything stored, and how far each follower has got in it."""

import sqlite3
from dataclasses import dataclass
from enum import StrEnum

from humbell.model import Moment


class Kind(StrEnum):
    """What an entry of the feed stands for."""

    CHUNKS = "chunks"
    TRANSITION = "transition"
    AUDIT = "audit"


@dataclass(frozen=True, slots=True)
class Entry:
    """
    One thing stored.

    Args:
        seq: its number; no number is used twice.

        kind: where to look for it.

        moment: when it was stored.

        configuration: digest of the configuration in force.
    """

    seq: int
    kind: Kind
    moment: Moment
    configuration: str


def append(connection: sqlite3.Connection, kind: Kind, moment: Moment, configuration: str) -> int:
    """Add an entry to the open transaction and return its number."""
    cursor = connection.execute(
        "INSERT INTO feed (kind, boot, mono_ns, utc_ns, clock_known, configuration) VALUES (?, ?, ?, ?, ?, ?)",
        (kind, moment.boot, moment.mono_ns, moment.utc_ns, moment.clock_known, configuration),
    )
    if cursor.lastrowid is None:
        raise sqlite3.OperationalError("the feed gave no number")
    return cursor.lastrowid


def entries(
    connection: sqlite3.Connection, after: int, up_to: int | None = None, kind: Kind | None = None, limit: int = 1000
) -> list[Entry]:
    """Return entries with numbers in (*after*, *up_to*], oldest first."""
    rows = connection.execute(
        "SELECT * FROM feed WHERE seq > ? AND seq <= ? AND (? IS NULL OR kind = ?) ORDER BY seq LIMIT ?",
        (after, 2**63 - 1 if up_to is None else up_to, kind, kind, limit),
    )
    return [
        Entry(
            seq=row["seq"],
            kind=Kind(row["kind"]),
            moment=Moment(row["boot"], row["mono_ns"], row["utc_ns"], bool(row["clock_known"])),
            configuration=row["configuration"],
        )
        for row in rows
    ]


def last_seq(connection: sqlite3.Connection) -> int:
    """Return the newest number; 0 in an empty journal."""
    return int(connection.execute("SELECT coalesce(max(seq), 0) FROM feed").fetchone()[0])


def cursor_of(connection: sqlite3.Connection, outlet: str, lane: str) -> int:
    """Return the number up to which *outlet* has confirmed everything in *lane*; 0 at first."""
    row = connection.execute("SELECT seq FROM cursor WHERE outlet = ? AND lane = ?", (outlet, lane)).fetchone()
    return 0 if row is None else int(row["seq"])


def move_cursor(connection: sqlite3.Connection, outlet: str, lane: str, seq: int) -> None:
    """Remember, in the open transaction, that *outlet* has confirmed *lane* up to *seq*."""
    connection.execute(
        "INSERT INTO cursor VALUES (?, ?, ?) ON CONFLICT DO UPDATE SET seq = excluded.seq", (outlet, lane, seq)
    )


def owe(connection: sqlite3.Connection, outlet: str, first: int, last: int) -> None:
    """Remember, in the open transaction, that *outlet* still owes the numbers *first* to *last*."""
    connection.execute(
        "INSERT INTO backlog VALUES (?, ?, ?) ON CONFLICT DO UPDATE SET last_seq = max(last_seq, excluded.last_seq)",
        (outlet, first, last),
    )


def owed(connection: sqlite3.Connection, outlet: str) -> list[tuple[int, int]]:
    """Return the ranges that *outlet* still owes, oldest first."""
    rows = connection.execute("SELECT first_seq, last_seq FROM backlog WHERE outlet = ? ORDER BY first_seq", (outlet,))
    return [(int(row["first_seq"]), int(row["last_seq"])) for row in rows]


def settle(connection: sqlite3.Connection, outlet: str, up_to: int) -> None:
    """Remember, in the open transaction, that *outlet* owes nothing up to *up_to* any more."""
    (last,) = connection.execute(
        "SELECT max(last_seq) FROM backlog WHERE outlet = ? AND first_seq <= ?", (outlet, up_to)
    ).fetchone()
    connection.execute("DELETE FROM backlog WHERE outlet = ? AND first_seq <= ?", (outlet, up_to))
    if last is not None and last > up_to:
        owe(connection, outlet, up_to + 1, last)
