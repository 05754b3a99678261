"""Reads a journal, live or left behind, without being able to change it."""

import sqlite3
from collections.abc import Collection, Iterator

from humbell.journal.chunks import QUALITIES, SERIES, Chunk, unpack
from humbell.model import Measure, PointId, Reading


def chunks(
    connection: sqlite3.Connection, start_ns: int = 0, end_ns: int = 2**63 - 1, point: PointId | None = None
) -> Iterator[Chunk]:
    """Return the chunks that touch [*start_ns*, *end_ns*), in the order in which they were stored."""
    rows = connection.execute(
        "SELECT c.*, v.readings, s.measure, p.machine, p.point FROM chunk c "
        "JOIN series s ON s.id = c.id % 4096 JOIN point p ON p.id = s.point LEFT JOIN chunk_values v ON v.id = c.id "
        "WHERE end_ns > ? AND start_ns < ? AND (? IS NULL OR (p.machine = ? AND p.point = ?)) ORDER BY c.id",
        (
            start_ns,
            end_ns,
            None if point is None else point.machine,
            None if point is None else point.machine,
            None if point is None else point.point,
        ),
    )
    for row in rows:
        yield Chunk(
            point=PointId(row["machine"], row["point"]),
            measure=Measure(row["measure"]),
            start_ns=row["start_ns"],
            end_ns=row["end_ns"],
            good_s=row["good_s"],
            mean_square=row["mean_square"],
            maximum=row["maximum"],
            worst=QUALITIES[row["worst"]],
            readings=row["readings"],
        )


def readings(
    connection: sqlite3.Connection, start_ns: int = 0, end_ns: int = 2**63 - 1, point: PointId | None = None
) -> Iterator[Reading]:
    """Return the single values that end in (*start_ns*, *end_ns*], commit by commit."""
    for chunk in chunks(connection, start_ns, end_ns, point):
        for reading in unpack(chunk):
            if start_ns < reading.time_ns <= end_ns:
                yield reading


def ends(connection: sqlite3.Connection, points: Collection[PointId]) -> dict[PointId, int]:
    """Return up to which time, UTC ns since 1970, the newest readings of each of *points* go, where there are any."""
    series = {
        row["id"]: PointId(row["machine"], row["point"])
        for row in connection.execute("SELECT s.id, machine, p.point FROM series s JOIN point p ON p.id = s.point")
    }
    missing = set(points) & set(series.values())
    found: dict[PointId, int] = {}
    commit = None
    # Backwards, and only as far as needed: a year's journal has some 30 million rows.
    for row in connection.execute("SELECT id, end_ns FROM chunk ORDER BY id DESC"):
        if row["id"] // SERIES != commit:
            missing -= found.keys()
            if not missing:
                break
            commit = row["id"] // SERIES
        point = series[row["id"] % SERIES]
        if point in missing:
            found[point] = max(row["end_ns"], found.get(point, row["end_ns"]))
    return found
