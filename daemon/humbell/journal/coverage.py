"""The ledger that gives every second of every point exactly one category."""

import sqlite3
from collections import defaultdict
from collections.abc import Collection, Iterable, Mapping
from dataclasses import dataclass

from humbell.model import Coverage, Measure, PointId, Reading, coverage_of

# Part of the stored form.
_ORDER = tuple(Coverage)


@dataclass(slots=True)
class Account:
    """
    Seconds of one category of one point.

    Args:
        seconds: all of them.

        judged_s: those that a limit judged.

        unsure_s: those at which the clock was not known to be right.
    """

    seconds: float = 0.0
    judged_s: float = 0.0
    unsure_s: float = 0.0


def account(
    readings: Iterable[Reading],
    counted: Mapping[PointId, Measure],
    judged: Collection[tuple[PointId, Measure]],
    *,
    clock_known: bool,
) -> dict[tuple[PointId, Coverage], Account]:
    """
    Add up the readings of one commit.

    Args:
        readings: of all points and measures.

        counted: the measure whose readings count at each point, so that each second counts once.

        judged: what has a limit.

        clock_known: whether the wall clock was known to be right.
    """
    accounts: dict[tuple[PointId, Coverage], Account] = defaultdict(Account)
    for reading in readings:
        point = PointId(reading.machine, reading.point)
        if counted.get(point) is not reading.measure:
            continue
        category = coverage_of(reading.quality, reading.cause)
        entry = accounts[point, category]
        entry.seconds += reading.span_s
        if category is Coverage.MEASURED and (point, reading.measure) in judged:
            entry.judged_s += reading.span_s
        if not clock_known:
            entry.unsure_s += reading.span_s
    return accounts


def store(
    connection: sqlite3.Connection,
    start_ns: int,
    numbers: Mapping[PointId, int],
    accounts: Mapping[tuple[PointId, Coverage], Account],
) -> None:
    """Add *accounts*, which begin at *start_ns*, to the open transaction; *numbers* are the points' row ids."""
    connection.executemany(
        "INSERT INTO coverage (start_ns, point, category, seconds, judged_s, unsure_s) VALUES (?, ?, ?, ?, ?, ?)",
        [
            (start_ns, numbers[point], _ORDER.index(category), entry.seconds, entry.judged_s, entry.unsure_s)
            for (point, category), entry in sorted(accounts.items())
        ],
    )


def totals(
    connection: sqlite3.Connection, start_ns: int = 0, end_ns: int = 2**63 - 1
) -> dict[PointId, dict[Coverage, Account]]:
    """Return the accounts of all points that begin in [*start_ns*, *end_ns*), in the order of precedence."""
    rows = connection.execute(
        "SELECT machine, p.point, category, sum(seconds) s, sum(judged_s) j, sum(unsure_s) u "
        "FROM coverage c JOIN point p ON p.id = c.point WHERE start_ns >= ? AND start_ns < ? "
        "GROUP BY machine, p.point, category",
        (start_ns, end_ns),
    )
    found: dict[PointId, dict[Coverage, Account]] = defaultdict(dict)
    for row in rows:
        point = PointId(row["machine"], row["point"])
        found[point][_ORDER[row["category"]]] = Account(row["s"], row["j"], row["u"])
    return {p: dict(sorted(by.items(), key=lambda item: _ORDER.index(item[0]))) for p, by in sorted(found.items())}
