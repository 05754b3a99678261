"""Who did what, when, from where and why."""

import sqlite3
from dataclasses import dataclass

from humbell.model import Moment


@dataclass(frozen=True, slots=True)
class Deed:
    """
    One command of a person or program.

    Args:
        who: the user, as the place where it came from knows him.

        origin: where it came from, such as ``command line``.

        action: what was asked for.

        target: on what.

        note: why.

        outcome: what came of it.
    """

    who: str
    origin: str
    action: str
    target: str
    note: str
    outcome: str


def store(connection: sqlite3.Connection, seq: int, deed: Deed) -> None:
    """Add *deed* to the open transaction."""
    connection.execute(
        "INSERT INTO audit VALUES (?, ?, ?, ?, ?, ?, ?)",
        (seq, deed.who, deed.origin, deed.action, deed.target, deed.note, deed.outcome),
    )


def deeds(connection: sqlite3.Connection, limit: int = 1000) -> list[tuple[int, Moment, Deed]]:
    """Return the newest *limit* deeds with number and time, oldest first."""
    rows = connection.execute(
        "SELECT * FROM audit JOIN feed USING (seq) ORDER BY seq DESC LIMIT ?", (limit,)
    ).fetchall()
    return [
        (
            row["seq"],
            Moment(row["boot"], row["mono_ns"], row["utc_ns"], bool(row["clock_known"])),
            Deed(row["who"], row["origin"], row["action"], row["target"], row["note"], row["outcome"]),
        )
        for row in reversed(rows)
    ]
