"""The journal's task: the one writer, what waits for it, and what it does when the disk fails."""

import sqlite3
import time
from collections import deque
from collections.abc import Mapping
from concurrent.futures import Future
from dataclasses import dataclass

import structlog

from humbell.alarms import AlarmState
from humbell.app.queues import BoundedQueue
from humbell.app.task import Task
from humbell.journal import Deed, Journal
from humbell.model import AlarmId, Reading, Transition

_log = structlog.get_logger()
# Batches come with blocks, at some 4 a second and source: a minute of a disk that hangs.
_BATCHES = 256
_TURN_S = 0.5
_PAUSE_S = 1.0
# A write-ahead log beyond this is held open by a reader that does not finish: 20 times what a checkpoint leaves.
_WAL_BYTES = 16 * 2**20


@dataclass(frozen=True, slots=True)
class Batch:
    """
    What one turn of the measures brought.

    Args:
        readings: in order of time.

        transitions: each with the state that it leads to.

        states: of all alarms, after the last reading.
    """

    readings: tuple[Reading, ...]
    transitions: tuple[tuple[Transition, AlarmState], ...]
    states: Mapping[AlarmId, AlarmState]


@dataclass(frozen=True, slots=True)
class JournalState:
    """
    How the journal is doing.

    Args:
        path: its file.

        trouble: what is wrong and what to do; empty while nothing is.

        commits: transactions so far.

        last_commit_age_s: since readings were last committed; None before.

        pending_s: seconds of signal that wait.

        failures: writes that failed.

        size_bytes: of the file and its write-ahead log.

        dropped_readings: thrown away because the disk was away for too long.

        put_aside: where a damaged journal was put at the start; empty if none was.
    """

    path: str
    trouble: str
    commits: int
    last_commit_age_s: float | None
    pending_s: float
    failures: int
    size_bytes: int
    dropped_readings: int
    put_aside: str


class Keeper:
    """
    Writes what it is given: transitions and deeds at once, readings by the minute.

    Args:
        journal: opened by `open`, which is to be called first.
    """

    def __init__(self, journal: Journal) -> None:
        self._journal = journal
        self._batches: BoundedQueue[Batch] = BoundedQueue("journal", _BATCHES)
        self._deeds: deque[tuple[Deed, Future[int]]] = deque()
        self._untold: deque[tuple[Transition, AlarmState]] = deque()
        self._states: Mapping[AlarmId, AlarmState] = {}
        self._since_ns: int | None = None
        self._trouble = ""
        self._shortage = ""
        self._failures = 0
        self._dropped_readings = 0
        self.put_aside = ""
        self.task = Task("journal", self._turn)

    @property
    def queue(self) -> BoundedQueue[Batch]:
        """What waits to be written."""
        return self._batches

    def give(self, batch: Batch) -> None:
        """
        Take a batch, at once: measuring never waits for the disk.

        When the disk has been away for too long, the oldest readings are dropped and counted; transitions never are.
        """
        dropped = self._batches.push(batch)
        if dropped is not None:
            self._untold.extend(dropped.transitions)
            self._dropped_readings += len(dropped.readings)

    def note(self, deed: Deed, timeout_s: float) -> int:
        """
        Commit *deed* and return its number.

        Raises:
            TimeoutError: it could not be written in time, so it must not be done.

            sqlite3.Error: it could not be written, so it must not be done.
        """
        answer: Future[int] = Future()
        self._deeds.append((deed, answer))
        try:
            return answer.result(timeout_s)
        except TimeoutError:
            answer.cancel()
            raise

    def finish(self) -> bool:
        """Write all that waits, once the task has ended; return whether it could be written."""
        while (batch := self._batches.get(0.0)) is not None:
            self._take(batch)
        try:
            self._tell()
            self._journal.commit(self._states)
        except sqlite3.Error as error:
            _log.error(
                "journal_lost",
                trouble=self._explain(error),
                transitions=len(self._untold),
                pending_s=self._journal.pending_s,
            )
            return False
        finally:
            self._journal.close()
        return True

    @property
    def state(self) -> JournalState:
        """How the journal is doing."""
        path = self._journal.settings.path
        sizes = [part.stat().st_size for part in (path, path.with_name(path.name + "-wal")) if part.exists()]
        last = self._journal.last_commit
        trouble = self._trouble or self._shortage
        if not trouble and len(sizes) > 1 and sizes[1] > _WAL_BYTES:
            trouble = (
                f"the write-ahead log has grown to {sizes[1] / 2**20:.0f} MiB: a program keeps a read open "
                f"(find it with: fuser {path}; stop it)"
            )
        return JournalState(
            path=str(path),
            trouble=trouble,
            commits=self._journal.commits,
            last_commit_age_s=None if last is None else (time.monotonic_ns() - last.mono_ns) / 1e9,
            pending_s=self._journal.pending_s,
            failures=self._failures,
            size_bytes=sum(sizes),
            dropped_readings=self._dropped_readings,
            put_aside=self.put_aside,
        )

    def _turn(self) -> bool:
        # While nothing can be written, what comes waits in the queue: that has a bound.
        batch = None if self._trouble else self._batches.get(_TURN_S)
        if batch is not None:
            self._take(batch)
        try:
            self._tell()
            self._do_deeds()
            if self._is_due() or self._trouble:
                self._journal.commit(self._states)
                self._since_ns = None
        except sqlite3.Error as error:
            self._fail(error)
        else:
            if self._trouble:
                _log.info("journal_recovered", failures=self._failures)
            self._trouble = ""
            self._note_shortage()
        return True

    def _take(self, batch: Batch) -> None:
        self._untold.extend(batch.transitions)
        for reading in batch.readings:
            self._journal.add(reading)
        self._states = batch.states
        if batch.readings and self._since_ns is None:
            self._since_ns = time.monotonic_ns()

    def _tell(self) -> None:
        while self._untold:
            self._journal.tell(*self._untold[0])
            self._untold.popleft()

    def _do_deeds(self) -> None:
        while self._deeds:
            deed, answer = self._deeds.popleft()
            if not answer.set_running_or_notify_cancel():
                continue
            try:
                answer.set_result(self._journal.note(deed))
            except sqlite3.Error as error:
                answer.set_exception(error)
                raise

    def _is_due(self) -> bool:
        commit_s = self._journal.settings.commit_s
        waited_s = 0.0 if self._since_ns is None else (time.monotonic_ns() - self._since_ns) / 1e9
        return self._journal.pending_s >= commit_s or waited_s >= commit_s

    def _fail(self, error: sqlite3.Error) -> None:
        self._failures += 1
        trouble = self._explain(error)
        if trouble != self._trouble:
            _log.error("journal_away", trouble=trouble)
        self._trouble = trouble
        self.task.wait(_PAUSE_S)

    def _note_shortage(self) -> None:
        shortage = self._journal.trouble
        if shortage and not self._shortage:
            _log.error("journal_short_of_room", trouble=shortage)
        self._shortage = shortage

    def _explain(self, error: sqlite3.Error) -> str:
        return f"{self._journal.settings.path}: the journal cannot be written: {error} (check space and disk)"
