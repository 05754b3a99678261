"""What is kept when: hourly roll-ups for ever, one-second values until the size is reached."""

import sqlite3

_HOUR_NS = 3600 * 10**9
# Values are shed in lots, so that the cap is not met again with every commit.
_LOT = 2000


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


def shed(connection: sqlite3.Connection, max_mib: int) -> int:
    """Drop the oldest one-second values, in the open transaction, where the file is over *max_mib*; return how many."""
    (pages,) = connection.execute("PRAGMA page_count").fetchone()
    (free,) = connection.execute("PRAGMA freelist_count").fetchone()
    (page_bytes,) = connection.execute("PRAGMA page_size").fetchone()
    if (pages - free) * page_bytes <= max_mib * 2**20:
        return 0
    oldest = connection.execute("SELECT id FROM chunk_values ORDER BY id LIMIT ?", (_LOT,)).fetchall()
    if not oldest:
        return 0
    return connection.execute("DELETE FROM chunk_values WHERE id <= ?", (oldest[-1]["id"],)).rowcount
