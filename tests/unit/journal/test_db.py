"""The journal's file: how it is opened, what counts as damage, and what each trouble is told as."""

import os
import shutil
import sqlite3
import subprocess
import sys
import tempfile
from collections.abc import Callable, Iterator
from contextlib import closing, contextmanager
from pathlib import Path
from typing import Never

import pytest

from humbell.journal import JournalError, open_for_reading, transitions
from humbell.journal import db as module
from humbell.journal.db import open_for_writing
from humbell.journal.room import BALLAST_BYTES
from unit.journal.given import commit, journal, reading, transition

NOBODY = 65534
TOLD = 10  # transitions in the journal
# What SQLite says of a file that a power cut or a bad card has left, each in its own words.
DAMAGES: dict[str, Callable[[bytes], bytes]] = {
    "cut in the middle of a page": lambda whole: whole[:10_000],
    "cut to its first page": lambda whole: whole[:4096],
    "cut to nothing": lambda _: b"",
    "overwritten at its beginning": lambda whole: b"\x00" * 100 + whole[100:],
    "overwritten in the middle": lambda whole: whole[:20_000] + b"\xa5" * 8192 + whole[28_192:],
    "with a later file format": lambda whole: whole[:44] + b"\x00\x00\x00\x09" + whole[48:],
    "with a table's definition damaged": lambda whole: whole.replace(b"who TEXT", b"who \xff\xfe T"),
    "of something else": lambda _: b"Tarnholm water works, pump house 1\n" * 500,
}


@pytest.fixture
def path(tmp_path: Path) -> Path:
    """A journal with a few pages of everything, closed."""
    kept = journal(tmp_path)
    kept.open()
    for number in range(TOLD):
        kept.tell(*transition(number))
    commit(kept, [reading(second) for second in range(1, 400)])
    kept.close()
    return kept.settings.path


@contextmanager
def opened(path: Path) -> Iterator[tuple[sqlite3.Connection, Path | None]]:
    """Open for writing, and close again."""
    connection, aside = open_for_writing(path)
    with closing(connection):
        yield connection, aside


@contextmanager
def as_nobody() -> Iterator[None]:
    """Do without the rights of root, who may do everything."""
    was_root = os.geteuid() == 0
    if was_root:
        os.seteuid(NOBODY)
    try:
        yield
    finally:
        if was_root:
            os.seteuid(0)


def test_what_was_asked_of_sqlite_is_what_it_does(path: Path) -> None:
    """A commit survives a power cut (WAL, synchronous FULL), and the write-ahead log stays small."""
    with opened(path) as (connection, aside):
        names = ["journal_mode", "synchronous", "wal_autocheckpoint", "journal_size_limit"]
        found = [connection.execute(f"PRAGMA {name}").fetchone()[0] for name in names]
    assert found == ["wal", 2, 100, 3_276_800]
    assert aside is None


def test_a_file_system_that_cannot_keep_the_promise_is_refused(path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """SQLite answers what it does instead, and so an unsafe journal is never used unnoticed."""
    monkeypatch.setattr(module, "_PRAGMAS", {"journal_mode": "shared"})
    with pytest.raises(JournalError, match="PRAGMA journal_mode is wal, not shared"):
        open_for_writing(path)


def test_a_journal_is_made_with_its_folder(tmp_path: Path) -> None:
    """A first start needs no preparation."""
    with opened(tmp_path / "var" / "lib" / "journal.db") as (connection, aside):
        assert connection.execute("SELECT count(*) FROM feed").fetchone()[0] == 0
    assert aside is None


@pytest.mark.parametrize("damage", DAMAGES)
def test_a_damaged_file_is_put_aside_and_a_new_journal_begun(damage: str, path: Path) -> None:
    """Monitoring goes on, what is left of the old one stays, and the caller learns where."""
    left = DAMAGES[damage](path.read_bytes())
    path.write_bytes(left)
    with opened(path) as (connection, aside):
        assert connection.execute("SELECT count(*) FROM feed").fetchone()[0] == 0
    assert aside == path.with_name("journal.db.damaged-1")
    assert aside.read_bytes() == left


def test_a_write_ahead_log_goes_aside_with_its_file(path: Path) -> None:
    """With the new file it would be thrown away, and what was last committed stands in it."""
    parts = {name: path.with_name(path.name + name) for name in ("", "-wal", "-shm")}
    for name, part in parts.items():
        part.write_bytes(name.encode() * 3)
    with opened(path) as (_, aside):
        assert aside is not None
        assert {name: aside.with_name(aside.name + name).read_bytes() for name in parts} == {
            "": b"",
            "-wal": b"-wal-wal-wal",
            "-shm": b"-shm-shm-shm",
        }


def test_a_write_ahead_log_that_lost_its_file_goes_aside(path: Path) -> None:
    """SQLite would begin with nothing, and say nothing."""
    log = path.with_name("journal.db-wal")
    log.write_bytes(b"transitions")
    path.unlink()
    with opened(path) as (_, aside):
        assert aside is not None
    assert path.with_name("journal.db.damaged-1-wal").read_bytes() == b"transitions"


def test_no_damaged_journal_is_put_upon_another(path: Path) -> None:
    """What one power cut left is kept when the next one comes."""
    for number in (1, 2, 3):
        path.write_bytes(b"damage %d" % number)
        with opened(path) as (_, aside):
            assert aside == path.with_name(f"journal.db.damaged-{number}")
    assert path.with_name("journal.db.damaged-1").read_bytes() == b"damage 1"


def test_a_damaged_page_anywhere_never_stops_a_start(path: Path) -> None:
    """Whatever stands in it: the journal opens, as it is or anew."""
    whole = path.read_bytes()
    outcomes = set()
    for at in range(0, len(whole), 4096):
        path.write_bytes(whole[:at] + b"\xff" * 4096 + whole[at + 4096 :])
        with opened(path) as (_, aside):
            outcomes.add(aside is not None)
    assert True in outcomes


@pytest.mark.parametrize("code", ["FULL", "BUSY", "NOMEM", "CANTOPEN", "READONLY", "IOERR_SHMSIZE"])
def test_what_may_be_cured_is_no_damage(code: str, path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Space, locks, memory and rights come back: the journal must still be there then."""
    kept = path.read_bytes()
    first_answer(code, monkeypatch)
    with pytest.raises(JournalError, match=f"cannot be opened: {code} \\(check rights, space"):
        open_for_writing(path)
    assert path.read_bytes() == kept


@pytest.mark.parametrize("code", ["CORRUPT", "NOTADB", "IOERR_READ"])
def test_what_cannot_be_read_is_damage(code: str, path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """A worn card does not stop the monitoring."""
    first_answer(code, monkeypatch)
    with opened(path) as (_, aside):
        assert aside is not None


def first_answer(code: str, monkeypatch: pytest.MonkeyPatch) -> None:
    """Let the check of the file end with this error, and all that follows go on as ever."""
    error = sqlite3.OperationalError(code)
    error.sqlite_errorcode = getattr(sqlite3, f"SQLITE_{code}")

    class Failing(sqlite3.Connection):
        def execute(self, *_: object) -> Never:
            raise error

    kinds = iter([Failing])
    real = sqlite3.connect
    monkeypatch.setattr(
        sqlite3,
        "connect",
        lambda path, **options: real(path, factory=next(kinds, sqlite3.Connection), **options),
    )


HOLD = """
import sqlite3, sys
connection = sqlite3.connect(sys.argv[1], isolation_level=None)
connection.execute("PRAGMA locking_mode = EXCLUSIVE")
connection.execute("BEGIN EXCLUSIVE")
print("held", flush=True)
sys.stdin.read()
"""


def test_a_journal_that_another_process_holds_is_no_damage(path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """It is told, stays where it is, and opens once the other one has let go."""
    monkeypatch.setattr(module, "_BUSY_MS", 50)
    with subprocess.Popen(
        [sys.executable, "-c", HOLD, str(path)], stdin=subprocess.PIPE, stdout=subprocess.PIPE
    ) as other:
        assert other.stdout is not None
        assert other.stdout.readline() == b"held\n"
        with pytest.raises(JournalError, match="database is locked"):
            open_for_writing(path)
        other.communicate(timeout=10)
    with opened(path) as (connection, aside):
        assert len(transitions(connection)) == TOLD
    assert aside is None


def test_a_folder_in_its_place_is_left_alone(tmp_path: Path) -> None:
    """A wrong path in the configuration must not move a folder with all that is in it."""
    (tmp_path / "precious").write_text("kept")
    with pytest.raises(JournalError, match=r"is a folder \(give the path of a file in it as journal.path\)"):
        open_for_writing(tmp_path)
    assert [part.name for part in tmp_path.iterdir()] == ["precious"]


@pytest.fixture
def foreign(path: Path) -> Iterator[Path]:
    """The journal in a folder that everybody may enter and change; the file belongs to somebody else."""
    with tempfile.TemporaryDirectory() as folder:
        Path(folder).chmod(0o777)
        yield Path(shutil.copy(path, folder))


def test_a_journal_that_may_not_be_read_is_no_damage(foreign: Path) -> None:
    """Started as the wrong user, the service says so, and leaves the file where it is."""
    foreign.chmod(0)
    with as_nobody(), pytest.raises(JournalError, match=r"unable to open database file \(check rights"):
        open_for_writing(foreign)
    assert [part.name for part in foreign.parent.iterdir()] == ["journal.db"]


def test_a_folder_that_may_not_be_written_is_told(foreign: Path) -> None:
    """A start without a journal is no start."""
    foreign.parent.chmod(0o555)
    with as_nobody(), pytest.raises(JournalError, match="check rights"):
        open_for_writing(foreign)
    with as_nobody(), pytest.raises(JournalError, match="check rights"):
        open_for_writing(foreign.with_name("new.db"))


@pytest.mark.parametrize(("file_mode", "folder_mode"), [(0, 0o755), (0o644, 0), (0o644, 0o555)])
def test_a_reader_without_rights_learns_that_it_lacks_them(file_mode: int, folder_mode: int, foreign: Path) -> None:
    """Not a word of a damaged journal or a wrong version."""
    foreign.chmod(file_mode)
    foreign.parent.chmod(folder_mode)
    try:
        with (
            as_nobody(),
            pytest.raises(JournalError, match="check the rights"),
            open_for_reading(foreign) as connection,
        ):
            transitions(connection)
    finally:
        foreign.parent.chmod(0o777)


def test_the_ballast_is_made_and_made_whole(path: Path) -> None:
    """One that a power cut left half written is none."""
    ballast = path.with_name("journal.db.ballast")
    assert ballast.stat().st_size == BALLAST_BYTES == 2**20
    ballast.write_bytes(b"half")
    with opened(path):
        assert ballast.stat().st_size == BALLAST_BYTES
