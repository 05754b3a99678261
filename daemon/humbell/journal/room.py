"""What the journal does on a full disk: a ballast file that is given back when there is no room for anything else."""

import shutil
import sqlite3
from pathlib import Path

# Freed when the disk is full: even DELETE needs room, and 1 MB was enough where it was tried.
BALLAST_BYTES = 2**20
# With less than this the ballast is not made again: it would fill the disk by itself.
_ROOM_BYTES = 2 * BALLAST_BYTES
PRIMARY = 0xFF  # the low byte of SQLite's codes; the others only say more


def is_full(error: sqlite3.Error) -> bool:
    """Return whether *error* says that the disk has no room, or the file none to grow."""
    return bool(getattr(error, "sqlite_errorcode", sqlite3.SQLITE_OK) & PRIMARY == sqlite3.SQLITE_FULL)


def make_room_to_open(path: Path) -> None:
    """
    Give up the ballast of the journal at *path* where the disk is full.

    Even opening needs some room: without it a sound file cannot be told from a damaged one.
    """
    if not _has_room(path, BALLAST_BYTES):
        drop_ballast(path)


def drop_ballast(path: Path) -> None:
    """Give the ballast of the journal at *path* back to the disk."""
    _ballast(path).unlink(missing_ok=True)


def keep_ballast(path: Path) -> bool:
    """Make the ballast of the journal at *path* where there is room for it; return whether it is there."""
    ballast = _ballast(path)
    try:
        if ballast.exists() and ballast.stat().st_size == BALLAST_BYTES:
            return True
        if _has_room(path, _ROOM_BYTES):
            ballast.write_bytes(bytes(BALLAST_BYTES))
            return True
    except OSError:
        # A disk that cannot take it has none to give; the journal's own writes will tell.
        pass
    ballast.unlink(missing_ok=True)
    return False


def _ballast(path: Path) -> Path:
    return path.with_name(path.name + ".ballast")


def _has_room(path: Path, need_bytes: int) -> bool:
    return shutil.disk_usage(path.parent).free >= need_bytes
