"""The spine: everything is written here first, with one sequence number, and read back from here."""

from humbell.journal.alarms import Stored, states, transitions
from humbell.journal.audit import Deed, deeds
from humbell.journal.chunks import Chunk, pack, unpack
from humbell.journal.coverage import Account, totals
from humbell.journal.db import JournalError, open_for_reading
from humbell.journal.feed import Entry, Kind, entries, last_seq
from humbell.journal.reader import chunks, readings
from humbell.journal.settings import JournalSettings
from humbell.journal.writer import Journal, Resumed, Watched

__all__ = [
    "Account",
    "Chunk",
    "Deed",
    "Entry",
    "Journal",
    "JournalError",
    "JournalSettings",
    "Kind",
    "Resumed",
    "Stored",
    "Watched",
    "chunks",
    "deeds",
    "entries",
    "last_seq",
    "open_for_reading",
    "pack",
    "readings",
    "states",
    "totals",
    "transitions",
    "unpack",
]
