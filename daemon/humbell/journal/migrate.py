"""Brings a journal to the newest form, one named step after the other, each committed with its own record."""

import sqlite3
from collections.abc import Iterator
from importlib.resources import files

_TABLE = "CREATE TABLE IF NOT EXISTS migration (name TEXT PRIMARY KEY) STRICT"


def migrate(connection: sqlite3.Connection) -> list[str]:
    """
    Return the names of the steps that were taken.

    Args:
        connection: in autocommit mode.

    Raises:
        sqlite3.OperationalError: a later version has written this journal, or a step failed; the journal is as before.
    """
    steps = {
        path.name: path for path in files("humbell.journal").joinpath("schema").iterdir() if path.name.endswith(".sql")
    }
    connection.execute(_TABLE)
    done = {name for (name,) in connection.execute("SELECT name FROM migration")}
    if unknown := done - steps.keys():
        raise sqlite3.OperationalError(f"a later version has written it ({', '.join(sorted(unknown))}): update Humbell")
    taken = []
    for name in sorted(steps.keys() - done):
        # A step and its record are one transaction; executescript would commit in between.
        connection.execute("BEGIN IMMEDIATE")
        try:
            for statement in _statements(steps[name].read_text()):
                connection.execute(statement)
            connection.execute("INSERT INTO migration VALUES (?)", (name,))
            connection.execute("COMMIT")
        except BaseException:
            # On a full disk SQLite has rolled back by itself.
            if connection.in_transaction:
                connection.execute("ROLLBACK")
            raise
        taken.append(name)
    return taken


def _statements(script: str) -> Iterator[str]:
    statement = ""
    for line in script.splitlines(keepends=True):
        statement += line
        if sqlite3.complete_statement(statement):
            yield statement
            statement = ""
    # The last statement may lack its semicolon; comments do no harm.
    yield statement
