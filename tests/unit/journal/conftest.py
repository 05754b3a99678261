"""A journal to write to, for all tests of the journal."""

from collections.abc import Iterator
from pathlib import Path

import pytest

from humbell.journal import Journal
from unit.journal.given import Clock, journal


@pytest.fixture
def clock() -> Clock:
    """The journal's clock."""
    return Clock()


@pytest.fixture
def kept(tmp_path: Path, clock: Clock) -> Iterator[Journal]:
    """A new journal, open."""
    made = journal(tmp_path, clock=clock)
    made.open()
    yield made
    made.close()
