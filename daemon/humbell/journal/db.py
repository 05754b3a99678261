"""The journal's file: opening, checking, pragmas, putting a damaged one aside. One writer, readers of their own."""

import sqlite3
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

from humbell.journal.migrate import migrate
from humbell.journal.room import PRIMARY, keep_ballast, make_room_to_open
from humbell.model import HumbellError

# 0.4 MB of write-ahead log instead of 4: on a full disk less has to fit.
_CHECKPOINT_PAGES = 100
_PAGE_BYTES = 4096
# A reader that keeps the database busy for longer is reported rather than waited for.
_BUSY_MS = 5000

_PRAGMAS = {
    "journal_mode": "wal",
    "synchronous": 2,  # FULL: what is committed survives a power cut; batching, not a weaker sync, saves the card
    "wal_autocheckpoint": _CHECKPOINT_PAGES,
    "foreign_keys": 0,
    "journal_size_limit": 8 * _CHECKPOINT_PAGES * _PAGE_BYTES,
}

# What SQLite answers to a file that is damaged. Rights, locks, space and memory may be cured with the file as it is.
_DAMAGE = frozenset({sqlite3.SQLITE_CORRUPT, sqlite3.SQLITE_NOTADB, sqlite3.SQLITE_ERROR})
_RIGHTS = frozenset({sqlite3.SQLITE_CANTOPEN, sqlite3.SQLITE_READONLY, sqlite3.SQLITE_PERM})
_PARTS = ("", "-wal", "-shm", "-journal")


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
        if path.is_dir():
            raise JournalError(f"{path}: is a folder (give the path of a file in it as journal.path)")
        make_room_to_open(path)
        if any(part.exists() for part in _parts(path)) and not _is_sound(path):
            aside = _put_aside(path)
        connection = _connect(path)
    except (OSError, sqlite3.Error) as error:
        raise JournalError(
            f"{path}: the journal cannot be opened: {error} (check rights, space and the state of the disk)"
        ) from error
    keep_ballast(path)
    return connection, aside


@contextmanager
def open_for_reading(path: Path) -> Iterator[sqlite3.Connection]:
    """
    Open the journal at *path* without being able to change it; it may be written to by another process meanwhile.

    Raises:
        JournalError: there is no journal, or it cannot be read.
    """
    try:
        if not path.exists():
            raise JournalError(f"{path}: there is no journal (check journal.path, or start humbell run)")
        connection = sqlite3.connect(f"{path.absolute().as_uri()}?mode=ro", uri=True, timeout=_BUSY_MS / 1000)
    except (OSError, sqlite3.Error) as error:
        raise JournalError(f"{path}: the journal cannot be read: {error} (check the rights)") from error
    connection.row_factory = sqlite3.Row
    try:
        connection.execute("PRAGMA query_only = 1")
        yield connection
    except sqlite3.DatabaseError as error:
        advice = "check the rights to file and folder" if _code(error) in _RIGHTS else "is it one of this version?"
        raise JournalError(f"{path}: the journal cannot be read: {error} ({advice})") from error
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
    # SQLite takes nothing for an empty journal, and throws the write-ahead log beside it away.
    if not path.exists() or not path.stat().st_size:
        return False
    connection = sqlite3.connect(path, timeout=_BUSY_MS / 1000)
    try:
        return bool(connection.execute("PRAGMA quick_check(1)").fetchone()[0] == "ok")
    except UnicodeDecodeError:
        # Python cannot decode a message that quotes damaged text.
        return False
    except sqlite3.DatabaseError as error:
        if _code(error) in _DAMAGE or error.sqlite_errorcode == sqlite3.SQLITE_IOERR_READ:
            return False
        raise
    finally:
        connection.close()


def _code(error: sqlite3.Error) -> int:
    # Errors that come from Python's side of the module have no code.
    return int(getattr(error, "sqlite_errorcode", sqlite3.SQLITE_OK)) & PRIMARY


def _put_aside(path: Path) -> Path:
    number = 1
    while any(part.exists() for part in _parts(_aside(path, number))):
        number += 1
    aside = _aside(path, number)
    for part, moved in zip(_parts(path), _parts(aside), strict=True):
        if part.exists():
            part.rename(moved)
    return aside


def _aside(path: Path, number: int) -> Path:
    return path.with_name(f"{path.name}.damaged-{number}")


def _parts(path: Path) -> list[Path]:
    return [path.with_name(path.name + suffix) for suffix in _PARTS]
