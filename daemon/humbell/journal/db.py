"""The journal's file: opening, checking, pragmas, putting a damaged one aside. One writer, readers of their own."""

import sqlite3
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

from humbell.journal.migrate import migrate
from humbell.model import HumbellError

# 0.4 MB of write-ahead log instead of 4: on a full disk less has to fit.
_CHECKPOINT_PAGES = 100
_PAGE_BYTES = 4096
# Freed when the disk is full: even DELETE needs room, and 1 MB was enough where it was tried.
BALLAST_BYTES = 2**20
# A reader that keeps the database busy for longer is reported rather than waited for.
_BUSY_MS = 5000

_PRAGMAS = {
    "journal_mode": "wal",
    "synchronous": 2,  # FULL: what is committed survives a power cut; batching, not a weaker sync, saves the card
    "wal_autocheckpoint": _CHECKPOINT_PAGES,
    "foreign_keys": 0,
    "journal_size_limit": 8 * _CHECKPOINT_PAGES * _PAGE_BYTES,
}


class JournalError(HumbellError):
    """The journal cannot be used: where, what, and what to do."""


def open_for_writing(path: Path) -> tuple[sqlite3.Connection, Path | None]:
    """
    Open, and where needed make, the journal at *path*.

    A damaged file is put aside beside it, so that monitoring goes on with a new one.

    Returns:
        The connection, and the path under which a damaged file was put aside, if one was.

    Raises:
        JournalError: there can be no journal at *path*.
    """
    aside = None
    try:
        path.parent.mkdir(parents=True, exist_ok=True)
        if path.exists() and not _is_sound(path):
            aside = _put_aside(path)
        connection = _connect(path)
    except (OSError, sqlite3.Error) as error:
        raise JournalError(
            f"{path}: the journal cannot be opened: {error} (check rights, space and the state of the disk)"
        ) from error
    _keep_ballast(path)
    return connection, aside


@contextmanager
def open_for_reading(path: Path) -> Iterator[sqlite3.Connection]:
    """
    Open the journal at *path* without being able to change it; it may be written to by another process meanwhile.

    Raises:
        JournalError: there is no journal, or it cannot be read.
    """
    if not path.exists():
        raise JournalError(f"{path}: there is no journal (check journal.path, or start humbell run)")
    try:
        connection = sqlite3.connect(f"file:{path}?mode=ro", uri=True, timeout=_BUSY_MS / 1000)
    except sqlite3.Error as error:
        raise JournalError(f"{path}: the journal cannot be read: {error} (check the rights)") from error
    connection.row_factory = sqlite3.Row
    try:
        connection.execute("PRAGMA query_only = 1")
        yield connection
    except sqlite3.DatabaseError as error:
        raise JournalError(f"{path}: the journal cannot be read: {error} (is it one of this version?)") from error
    finally:
        connection.close()


def _connect(path: Path) -> sqlite3.Connection:
    connection = sqlite3.connect(path, isolation_level=None, timeout=_BUSY_MS / 1000, check_same_thread=False)
    connection.row_factory = sqlite3.Row
    try:
        _set_pragmas(connection)
        migrate(connection)
    except BaseException:
        connection.close()
        raise
    return connection


def _set_pragmas(connection: sqlite3.Connection) -> None:
    for name, value in _PRAGMAS.items():
        connection.execute(f"PRAGMA {name} = {value}")
        (found,) = connection.execute(f"PRAGMA {name}").fetchone()
        # SQLite does not refuse what it cannot do (WAL on a network share, say): it answers with what it does instead.
        if found != value:
            raise sqlite3.OperationalError(f"PRAGMA {name} is {found}, not {value}")


def _is_sound(path: Path) -> bool:
    try:
        connection = sqlite3.connect(path, timeout=_BUSY_MS / 1000)
    except sqlite3.Error:
        return False
    try:
        return bool(connection.execute("PRAGMA quick_check(1)").fetchone()[0] == "ok")
    except sqlite3.DatabaseError as error:
        # Another process that holds the file is no damage.
        if "locked" in str(error) or "busy" in str(error):
            raise
        return False
    finally:
        connection.close()


def _put_aside(path: Path) -> Path:
    number = 1
    while (aside := path.with_name(f"{path.name}.damaged-{number}")).exists():
        number += 1
    for suffix in ("", "-wal", "-shm"):
        part = path.with_name(path.name + suffix)
        if part.exists():
            part.rename(aside.with_name(aside.name + suffix))
    return aside


def _keep_ballast(path: Path) -> None:
    ballast = path.with_name(path.name + ".ballast")
    try:
        if not ballast.exists() or ballast.stat().st_size != BALLAST_BYTES:
            ballast.write_bytes(bytes(BALLAST_BYTES))
    except OSError:
        # A disk too full for its ballast has none to give; the journal's own writes will tell.
        ballast.unlink(missing_ok=True)
