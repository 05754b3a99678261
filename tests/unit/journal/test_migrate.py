"""Bringing a journal to the newest form: all steps or none, each once, and never backwards."""

import sqlite3
from collections.abc import Iterator
from contextlib import closing
from importlib.resources import files
from pathlib import Path

import pytest

from humbell.journal import JournalError
from humbell.journal import migrate as module
from humbell.journal.db import open_for_writing
from humbell.journal.migrate import migrate
from unit.journal.given import commit, journal, reading

FIRST = "CREATE TABLE pump (name TEXT) STRICT;\n\nINSERT INTO pump VALUES ('p-101'); -- the only one\n"
SECOND = "ALTER TABLE pump ADD COLUMN speed_rpm REAL;\nUPDATE pump SET speed_rpm = 1480;\n-- Nothing more.\n"


@pytest.fixture
def connection() -> Iterator[sqlite3.Connection]:
    """An empty database."""
    with closing(sqlite3.connect(":memory:", isolation_level=None)) as made:
        yield made


@pytest.fixture
def schema(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    """A folder of steps in the place of the real one, with the first step in it."""
    folder = tmp_path / "schema"
    folder.mkdir()
    (folder / "0001_pumps.sql").write_text(FIRST)
    (folder / "README").write_text("no step")
    monkeypatch.setattr(module, "files", lambda _: tmp_path)
    return folder


def content(connection: sqlite3.Connection) -> list[str]:
    """Return all that is in a database."""
    return list(connection.iterdump())


def test_from_nothing_every_step_is_taken(connection: sqlite3.Connection) -> None:
    """In the order of their names; afterwards everything is there that the newest form has."""
    folder = files("humbell.journal").joinpath("schema")
    assert migrate(connection) == sorted(path.name for path in folder.iterdir() if path.name.endswith(".sql"))
    tables = {name for (name,) in connection.execute("SELECT name FROM sqlite_master WHERE type = 'table'")}
    assert {"feed", "chunk", "chunk_values", "hour", "coverage", "transition", "checkpoint", "audit"} <= tables


def test_twice_is_nothing(connection: sqlite3.Connection) -> None:
    """A journal of the newest form is left as it is."""
    migrate(connection)
    before = content(connection)
    assert migrate(connection) == []
    assert content(connection) == before


def test_only_what_is_missing_is_done(connection: sqlite3.Connection, schema: Path) -> None:
    """A later version finds the readings of the earlier one, and changes them once."""
    assert migrate(connection) == ["0001_pumps.sql"]
    (schema / "0002_speeds.sql").write_text(SECOND)
    assert migrate(connection) == ["0002_speeds.sql"]
    assert migrate(connection) == []
    assert connection.execute("SELECT * FROM pump").fetchall() == [("p-101", 1480.0)]


def test_steps_are_taken_in_the_order_of_their_names(connection: sqlite3.Connection, schema: Path) -> None:
    """Later steps build upon earlier ones, in whatever order the folder lists them."""
    for number in range(9, 1, -1):
        (schema / f"000{number}_step.sql").write_text(f"CREATE TABLE step_{number} (n INTEGER);\n")
    taken = migrate(connection)
    assert taken == sorted(taken)
    assert len(taken) == 9


def test_a_last_statement_without_its_semicolon_is_done_too(connection: sqlite3.Connection, schema: Path) -> None:
    """Nothing of a step is passed over in silence."""
    (schema / "0002_speeds.sql").write_text("DELETE FROM pump")
    migrate(connection)
    assert connection.execute("SELECT * FROM pump").fetchall() == []


@pytest.mark.parametrize(
    "step",
    [
        "CREATE TABLE fan (name TEXT);\nDROP TABLE pump;\nINSERT INTO nowhere VALUES (1);\n",
        "CREATE TABLE fan (name TEXT);\nDELETE FROM pump WHERE (name\n",
        "CREATE TABLE fan (name TEXT);\nDELETE FROM pump;\nINSERT INTO migration VALUES ('0002_bad.sql');\n",
    ],
    ids=["a statement fails", "the last statement is cut short", "its record fails"],
)
def test_a_step_that_fails_leaves_the_journal_as_it_was(
    step: str, connection: sqlite3.Connection, schema: Path
) -> None:
    """A step is done with its record or not at all, and those before it stay done."""
    migrate(connection)
    before = content(connection)
    (schema / "0002_bad.sql").write_text(step)
    with pytest.raises(sqlite3.Error):
        migrate(connection)
    assert content(connection) == before
    assert not connection.in_transaction
    (schema / "0002_bad.sql").write_text(SECOND)
    assert migrate(connection) == ["0002_bad.sql"]


def test_a_step_on_a_full_disk_leaves_the_journal_as_it_was(connection: sqlite3.Connection, schema: Path) -> None:
    """SQLite rolls back by itself then; what is told is the full disk."""
    migrate(connection)
    before = content(connection)
    (schema / "0002_big.sql").write_text("CREATE TABLE big (x BLOB);\nINSERT INTO big VALUES (zeroblob(1000000));\n")
    connection.execute("PRAGMA max_page_count = 20")
    with pytest.raises(sqlite3.OperationalError, match="full"):
        migrate(connection)
    assert content(connection) == before


def test_a_later_version_s_journal_is_refused_with_what_to_do(tmp_path: Path) -> None:
    """It is no damage: it stays where it is, to the last byte, for the version that wrote it."""
    kept = journal(tmp_path)
    kept.open()
    commit(kept, [reading(1)])
    kept.close()
    path = kept.settings.path
    with closing(sqlite3.connect(path)) as connection:
        connection.execute("INSERT INTO migration VALUES ('9999_later.sql')")
        connection.commit()
    before = path.read_bytes()
    with pytest.raises(JournalError, match=r"a later version has written it \(9999_later.sql\): update Humbell"):
        open_for_writing(path)
    assert path.read_bytes() == before
