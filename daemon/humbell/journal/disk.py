"""Everything that is written goes through here, in transactions, and is tried once more where the disk was full."""

import sqlite3
from collections.abc import Callable
from pathlib import Path
from typing import TypeVar

from humbell.journal import retention
from humbell.journal.room import drop_ballast, is_full, keep_ballast

T = TypeVar("T")


class Disk:
    """
    Writes through one connection.

    Args:
        connection: in autocommit mode; closed by `close`.

        path: of the journal.

        max_mib: its largest size.
    """

    def __init__(self, connection: sqlite3.Connection, path: Path, max_mib: int) -> None:
        self.connection = connection
        self._path = path
        self._max_mib = max_mib
        self._is_short = not keep_ballast(path)

    @property
    def trouble(self) -> str:
        """What is wrong though everything is written, and what to do; empty while nothing is."""
        if not self._is_short:
            return ""
        return f"{self._path}: the disk is full: the oldest one-second values make room for new ones (free some space)"

    def write(self, work: Callable[[sqlite3.Connection], T]) -> T:
        """
        Do *work* in one transaction and return what it returns; where the disk is full, make room and do it again.

        Raises:
            sqlite3.Error: it could not be written; nothing has changed.
        """
        try:
            return self._transact(work)
        except sqlite3.Error as error:
            if not is_full(error):
                raise
        self._make_room()
        return self._transact(work)

    def shed(self, connection: sqlite3.Connection) -> None:
        """Drop, in the open transaction, the oldest one-second values where the file or the disk asks for it."""
        retention.shed(connection, self._max_mib, retention.SPARE_PAGES if self._is_short else 0)

    def look(self) -> None:
        """Look whether there is room for the ballast again."""
        self._is_short = not keep_ballast(self._path)

    def close(self) -> None:
        """Let go of the file."""
        self.connection.close()

    def _make_room(self) -> None:
        self._is_short = True
        drop_ballast(self._path)
        try:
            # Before others take the room: the write-ahead log begins anew in the place that it has.
            self.connection.execute("PRAGMA wal_checkpoint(PASSIVE)")
            self._transact(self.shed)
        except sqlite3.Error as error:
            # What is to be written may be smaller than this.
            if not is_full(error):
                raise

    def _transact(self, work: Callable[[sqlite3.Connection], T]) -> T:
        with _Transaction(self.connection) as connection:
            return work(connection)


class _Transaction:
    """Commits at its end, or, where something is raised, changes nothing."""

    def __init__(self, connection: sqlite3.Connection) -> None:
        self._connection = connection

    def __enter__(self) -> sqlite3.Connection:
        self._connection.execute("BEGIN IMMEDIATE")
        return self._connection

    def __exit__(self, kind: type[BaseException] | None, *_: object) -> None:
        if kind is None:
            try:
                self._connection.execute("COMMIT")
            except sqlite3.Error:
                self._roll_back()
                raise
        else:
            self._roll_back()

    def _roll_back(self) -> None:
        if self._connection.in_transaction:
            self._connection.execute("ROLLBACK")
