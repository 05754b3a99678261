"""What is kept when: hourly roll-ups for ever, one-second values until the size is reached."""

import sqlite3

from humbell.journal.chunks import SERIES

_HOUR_NS = 3600 * 10**9
# A source that lags by less still gets its readings into the hour.
_LATE_NS = 600 * 10**9
# Values are shed in lots, so that the cap is not met again with every commit.
_LOT = 2000
# On a full disk, which may have room again soon, in smaller ones: ten minutes of sixteen points, some ten pages.
_SMALL_LOT = 320
# Free pages in the file with which it need not grow on a full disk: a commit takes up to ten.
SPARE_PAGES = 32


def roll_up(connection: sqlite3.Connection, until_ns: int) -> None:
    """
    Add, in the open transaction, the roll-ups of the hours that are complete and have none yet.

    Args:
        connection: with an open transaction.

        until_ns: up to where the readings of all points that send are there, UTC ns since 1970.
    """
    before_ns = (until_ns - _LATE_NS) // _HOUR_NS * _HOUR_NS
    # Later hours are those of a clock that was ahead.
    (last_ns,) = connection.execute("SELECT max(start_ns) FROM hour WHERE start_ns < ?", (before_ns,)).fetchone()
    first_ns = 0 if last_ns is None else last_ns + _HOUR_NS
    if first_ns >= before_ns:
        return
    # Readings are stored after they were taken, so what was stored long before need not be looked through.
    row = connection.execute(
        "SELECT seq FROM feed WHERE utc_ns < ? ORDER BY seq DESC LIMIT 1", (first_ns - _HOUR_NS,)
    ).fetchone()
    connection.execute(
        "INSERT INTO hour SELECT start_ns / :hour * :hour h, id % 4096 s, sum(good_s), "
        "sum(good_s * mean_square) / nullif(sum(good_s), 0), max(maximum), max(worst) "
        "FROM chunk WHERE id >= :id AND start_ns >= :first AND start_ns < :before GROUP BY h, s ON CONFLICT DO NOTHING",
        {
            "hour": _HOUR_NS,
            "id": 0 if row is None else row["seq"] * SERIES,
            "first": first_ns,
            "before": before_ns,
        },
    )


def shed(connection: sqlite3.Connection, max_mib: int, spare_pages: int = 0) -> int:
    """
    Drop a lot of the oldest one-second values, in the open transaction, where there is too little room.

    Args:
        connection: with an open transaction.

        max_mib: size that the file may have, free pages not counted.

        spare_pages: free pages that it is to have.

    Returns:
        How many blobs were dropped.
    """
    (pages,) = connection.execute("PRAGMA page_count").fetchone()
    (free,) = connection.execute("PRAGMA freelist_count").fetchone()
    (page_bytes,) = connection.execute("PRAGMA page_size").fetchone()
    is_over = (pages - free) * page_bytes > max_mib * 2**20
    if not is_over and free >= spare_pages:
        return 0
    lot = _LOT if is_over else _SMALL_LOT
    oldest = connection.execute("SELECT id FROM chunk_values ORDER BY id LIMIT ?", (lot,)).fetchall()
    if not oldest:
        return 0
    return connection.execute("DELETE FROM chunk_values WHERE id <= ?", (oldest[-1]["id"],)).rowcount
