"""Reads one source for ever: opens it, hands its blocks on, closes and opens it again when it is lost."""

import time
from collections.abc import Callable
from dataclasses import asdict, dataclass, is_dataclass

import structlog

from humbell.app.queues import BoundedQueue
from humbell.app.task import Task
from humbell.model import Block, HumbellError
from humbell.sources import EndOfSource, Source

_log = structlog.get_logger()
# How long one turn waits for a block: short enough for a quick stop, long enough to cost nothing.
_TURN_S = 0.5
# A source that is away is tried again after 1, 2, 4 ... up to 30 s, for ever.
_FIRST_PAUSE_S, _LONGEST_PAUSE_S = 1.0, 30.0


@dataclass(frozen=True, slots=True)
class SourceState:
    """
    How a source is doing.

    Args:
        name: its id.

        state: ``opening``, ``open``, ``away`` or ``ended``.

        trouble: what is wrong and what to do; empty while nothing is.

        blocks: handed on.

        seconds: of signal in them.

        age_s: since the last block came; None before the first.

        opened: how often it was opened.

        details: counters of its own kind, by name.
    """

    name: str
    state: str
    trouble: str
    blocks: int
    seconds: float
    age_s: float | None
    opened: int
    details: dict[str, object]


class Intake:
    """
    The task of one source.

    Args:
        source: where blocks come from.

        blocks: where they go; while it is full the source has to wait.
    """

    def __init__(self, source: Source, blocks: BoundedQueue[Block]) -> None:
        self._source = source
        self._blocks = blocks
        self._state = "opening"
        self._trouble = ""
        self._told = ""
        self._count = 0
        self._seconds = 0.0
        self._last_ns: int | None = None
        self._opened = 0
        self._pause_s = _FIRST_PAUSE_S
        self._waiting: Block | None = None
        self._born_ns = time.monotonic_ns()
        self.task = Task(f"source {source.name}", self._turn)

    @property
    def name(self) -> str:
        """Id of the source."""
        return self._source.name

    @property
    def ended(self) -> bool:
        """Whether there is nothing more to come."""
        return self._state == "ended"

    @property
    def silent_s(self) -> float:
        """Seconds since the last block, or since the start."""
        since_ns = self._last_ns if self._last_ns is not None else self._born_ns
        return (time.monotonic_ns() - since_ns) / 1e9

    def start(self) -> None:
        """Begin to read."""
        self._born_ns = time.monotonic_ns()
        self.task.start()

    def close(self) -> None:
        """Let go of the source; ends a read that waits."""
        self._source.close()

    def rest(self) -> list[Block]:
        """Return the blocks that have come and were not handed on, once the task has ended and the source is closed."""
        waiting = [] if self._waiting is None else [self._waiting]
        left = getattr(self._source, "rest", None)
        return waiting + (list(left()) if callable(left) else [])

    @property
    def state(self) -> SourceState:
        """How it is doing."""
        counters = getattr(self._source, "counters", None)
        link = getattr(self._source, "health", None)
        return SourceState(
            name=self.name,
            state=self._state,
            trouble=self._trouble or str(getattr(link, "trouble", None) or ""),
            blocks=self._count,
            seconds=self._seconds,
            age_s=None if self._last_ns is None else (time.monotonic_ns() - self._last_ns) / 1e9,
            opened=self._opened,
            details=asdict(counters) if is_dataclass(counters) and not isinstance(counters, type) else {},
        )

    def _turn(self) -> bool:
        try:
            if self._state != "open":
                self._open()
            return self._hand_on()
        except EndOfSource:
            self._state = "ended"
            _log.info("source_ended", source=self.name, blocks=self._count)
            return False
        except HumbellError as error:
            self._lose(str(error))
        except Exception as error:  # noqa: BLE001 - somebody else's driver: whatever it raises, a new start may help
            self._lose(f"sources.{self.name}: {type(error).__name__}: {error} (see its driver)")
        return True

    def _open(self) -> None:
        self._source.open()
        self._state, self._trouble = "open", ""
        self._opened += 1
        if not self._told:
            _log.info("source_open", source=self.name)

    def _hand_on(self) -> bool:
        block = self._waiting or self._source.read(_TURN_S)
        if block is None:
            return True
        # A block that finds no room waits here: nothing is dropped, and the source sees that we are slow.
        self._waiting = None if self._blocks.put(block, _TURN_S) else block
        if self._waiting is None:
            self._count += 1
            self._seconds += block.length / block.rate_hz
            self._last_ns = time.monotonic_ns()
            self._pause_s, self._told = _FIRST_PAUSE_S, ""
        return True

    def _lose(self, trouble: str) -> None:
        if self.task.stopping:
            return
        # Once, until blocks come again: some can be opened again and again, and never read.
        if trouble != self._told:
            _log.warning("source_away", source=self.name, trouble=trouble, again_in_s=self._pause_s)
        self._state, self._trouble, self._told = "away", trouble, trouble
        self._source.close()
        self.task.wait(self._pause_s)
        self._pause_s = min(2 * self._pause_s, _LONGEST_PAUSE_S)


# Makes a source from its id and settings.
MakeSource = Callable[[str, object], Source]
