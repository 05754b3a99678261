"""What is kept when: hourly roll-ups for ever, one-second values until the size is reached."""

import sqlite3

_HOUR_NS = 3600 * 10**9
# Values are shed in lots, so that the cap is not met again with every commit.
_LOT = 2000
# Free pages in the file with which it need not grow on a full disk: a commit takes some ten.
SPARE_PAGES = 128


def roll_up(connection: sqlite3.Connection, before_ns: int) -> None:
    """
    Add, in the open transaction, the roll-ups of the hours that ended by *before_ns* and have none yet.

    Args:
        connection: with an open transaction.

        before_ns: begin of an hour, UTC ns since 1970.
    """
    (last_ns,) = connection.execute("SELECT max(start_ns) FROM hour").fetchone()
    first_ns = 0 if last_ns is None else last_ns + _HOUR_NS
    if first_ns >= before_ns:
        return
    connection.execute(
        "INSERT INTO hour SELECT start_ns / :hour * :hour h, id % 4096 s, sum(good_s), "
        "sum(good_s * mean_square) / nullif(sum(good_s), 0), max(maximum), max(worst) "
        "FROM chunk WHERE start_ns >= :first AND start_ns < :before GROUP BY h, s ON CONFLICT DO NOTHING",
        {"hour": _HOUR_NS, "first": first_ns, "before": before_ns},
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
    if (pages - free) * page_bytes <= max_mib * 2**20 and free >= spare_pages:
        return 0
    oldest = connection.execute("SELECT id FROM chunk_values ORDER BY id LIMIT ?", (_LOT,)).fetchall()
    if not oldest:
        return 0
    return connection.execute("DELETE FROM chunk_values WHERE id <= ?", (oldest[-1]["id"],)).rowcount
