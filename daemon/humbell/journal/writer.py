"""The one writer of the journal: what is told at once, what in chunks, and what a restart finds."""

import sqlite3
from collections import defaultdict
from collections.abc import Callable, Collection, Mapping
from dataclasses import dataclass, field
from pathlib import Path

from humbell.alarms import AlarmState
from humbell.journal import alarms, audit, coverage, feed, retention
from humbell.journal.audit import Deed
from humbell.journal.chunks import QUALITIES, Chunk, chunk_id, pack
from humbell.journal.db import JournalError, open_for_writing
from humbell.journal.disk import Disk
from humbell.journal.feed import Kind
from humbell.journal.reader import ends
from humbell.journal.settings import JournalSettings
from humbell.model import AlarmId, Measure, Moment, PointId, Reading, Transition


@dataclass(frozen=True, slots=True)
class Watched:
    """
    What the journal has to know of the configuration.

    Args:
        digest: SHA-256 of the configuration.

        content: its text.

        counted: the measure whose readings count for the coverage of each point.

        judged: what has a limit.

        kept: of which measures the single values are kept, not only the summary of each commit.
    """

    digest: str
    content: str
    counted: Mapping[PointId, Measure]
    judged: Collection[tuple[PointId, Measure]]
    kept: Collection[Measure]


@dataclass(frozen=True, slots=True)
class Resumed:
    """
    What was found in a journal when it was opened.

    Args:
        states: the last committed state of every alarm.

        ends_ns: UTC up to which the readings of each point are committed.

        put_aside: where a damaged journal was put; None where there was none.
    """

    states: Mapping[AlarmId, AlarmState] = field(default_factory=dict)
    ends_ns: Mapping[PointId, int] = field(default_factory=dict)
    put_aside: Path | None = None


class Journal:
    """
    Writes to the journal. Belongs to one thread.

    Transitions and deeds are committed at once; readings when `commit` is called, in one transaction with the coverage
    and the alarms' timers. What was not committed counts as a gap after a restart.

    Args:
        settings: where and how.

        watched: what to keep of it.

        now: the moment, by both clocks.
    """

    def __init__(self, settings: JournalSettings, watched: Watched, now: Callable[[], Moment]) -> None:
        self.settings = settings
        self._watched = watched
        self._now = now
        self._disk: Disk | None = None
        self._points: dict[PointId, int] = {}
        self._series: dict[tuple[PointId, Measure], int] = {}
        self._readings: list[Reading] = []
        self.commits = 0
        self.last_commit: Moment | None = None

    def open(self) -> Resumed:
        """
        Open the file, put a damaged one aside, and return what a restart goes on from.

        Raises:
            JournalError: there can be no journal there.
        """
        path = self.settings.path
        connection, aside = open_for_writing(path)
        self._disk = Disk(connection, path, self.settings.max_mib)
        try:
            self._disk.write(self._begin)
            return Resumed(alarms.states(connection), ends(connection, self._watched.counted), aside)
        except sqlite3.Error as error:
            self.close()
            raise JournalError(
                f"{path}: the journal cannot be written: {error} (check space and disk, and what else has it open)"
            ) from error

    @property
    def trouble(self) -> str:
        """What is wrong though everything is written, and what to do; empty while nothing is."""
        return "" if self._disk is None else self._disk.trouble

    @property
    def pending_s(self) -> float:
        """Seconds of signal that wait for the next commit."""
        if not self._readings:
            return 0.0
        return (self._readings[-1].time_ns - self._readings[0].time_ns) / 1e9 + self._readings[0].span_s

    def add(self, reading: Reading) -> None:
        """Keep *reading* for the next commit."""
        self._readings.append(reading)

    def tell(self, transition: Transition, state: AlarmState) -> int:
        """
        Commit *transition* and the *state* that it leads to; it counts from now on.

        Raises:
            sqlite3.Error: it could not be written; it does not count, and may be told again.
        """
        now = self._now()

        def work(db: sqlite3.Connection) -> int:
            seq = feed.append(db, Kind.TRANSITION, now, self._watched.digest)
            alarms.store(db, seq, transition, state)
            return seq

        seq = self._open.write(work)
        self.commits += 1
        return seq

    def note(self, deed: Deed) -> int:
        """
        Commit *deed*.

        Raises:
            sqlite3.Error: it could not be written, so the deed must not be done.
        """
        now = self._now()

        def work(db: sqlite3.Connection) -> int:
            seq = feed.append(db, Kind.AUDIT, now, self._watched.digest)
            audit.store(db, seq, deed)
            return seq

        seq = self._open.write(work)
        self.commits += 1
        return seq

    def commit(self, states: Mapping[AlarmId, AlarmState]) -> int:
        """
        Commit the readings that wait, their coverage and the alarms' *states*; return how many readings it were.

        Raises:
            sqlite3.Error: it could not be written; the readings go on waiting.
        """
        if not self._readings:
            return 0
        disk = self._open
        now = self._now()
        groups: dict[tuple[PointId, Measure], list[Reading]] = defaultdict(list)
        for reading in self._readings:
            groups[PointId(reading.machine, reading.point), reading.measure].append(reading)
        accounts = coverage.account(
            self._readings, self._watched.counted, self._watched.judged, clock_known=now.clock_known
        )
        chunks = [pack(group, keep_values=key[1] in self._watched.kept) for key, group in groups.items()]
        start_ns = min(chunk.start_ns for chunk in chunks)

        def work(db: sqlite3.Connection) -> tuple[dict[PointId, int], dict[tuple[PointId, Measure], int]]:
            # First: what is shed makes room for what follows, and never is what follows.
            disk.shed(db)
            series = {key: self._series_number(db, *key) for key in groups}
            numbers = {point: self._point_number(db, point) for point, _ in groups}
            seq = feed.append(db, Kind.CHUNKS, now, self._watched.digest)
            db.executemany(
                "INSERT INTO chunk VALUES (?, ?, ?, ?, ?, ?, ?)",
                [_row(chunk_id(seq, series[chunk.point, chunk.measure]), chunk) for chunk in chunks],
            )
            db.executemany(
                "INSERT INTO chunk_values VALUES (?, ?)",
                [(chunk_id(seq, series[c.point, c.measure]), c.readings) for c in chunks if c.readings is not None],
            )
            coverage.store(db, start_ns, numbers, accounts)
            alarms.checkpoint(db, seq, max(chunk.end_ns for chunk in chunks), states)
            retention.roll_up(db, start_ns)
            return numbers, series

        numbers, series = disk.write(work)
        # Only now: before the commit nothing is certain.
        self._points.update(numbers)
        self._series.update(series)
        count = len(self._readings)
        self._readings.clear()
        self.commits += 1
        self.last_commit = now
        disk.look()
        return count

    def close(self) -> None:
        """Let go of the file. What waits is not committed; call `commit` before."""
        if self._disk is not None:
            self._disk.close()
            self._disk = None

    @property
    def _open(self) -> Disk:
        if self._disk is None:
            raise sqlite3.ProgrammingError("the journal is not open")
        return self._disk

    def _begin(self, db: sqlite3.Connection) -> None:
        now = self._now()
        db.execute("INSERT INTO boot VALUES (?, ?, ?, ?)", (now.boot, now.mono_ns, now.utc_ns, now.clock_known))
        db.execute(
            "INSERT INTO configuration VALUES (?, ?, ?) ON CONFLICT DO NOTHING",
            (self._watched.digest, now.utc_ns, self._watched.content),
        )

    def _point_number(self, db: sqlite3.Connection, point: PointId) -> int:
        if point in self._points:
            return self._points[point]
        key = (point.machine, point.point)
        db.execute("INSERT INTO point (machine, point) VALUES (?, ?) ON CONFLICT DO NOTHING", key)
        return int(db.execute("SELECT id FROM point WHERE machine = ? AND point = ?", key).fetchone()["id"])

    def _series_number(self, db: sqlite3.Connection, point: PointId, measure: Measure) -> int:
        if (point, measure) in self._series:
            return self._series[point, measure]
        key = (self._point_number(db, point), measure)
        db.execute("INSERT INTO series (point, measure) VALUES (?, ?) ON CONFLICT DO NOTHING", key)
        return int(db.execute("SELECT id FROM series WHERE point = ? AND measure = ?", key).fetchone()["id"])


def _row(number: int, chunk: Chunk) -> tuple[object, ...]:
    return (
        number,
        chunk.start_ns,
        chunk.end_ns,
        chunk.good_s,
        chunk.mean_square,
        chunk.maximum,
        QUALITIES.index(chunk.worst),
    )
