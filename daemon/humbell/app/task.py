"""A named thread that does one thing over and over, beats while it does, and says what ended it."""

import threading
import time
from collections.abc import Callable

import structlog

_log = structlog.get_logger()
# After an error nobody foresaw the task goes on, but not so fast that it fills the log.
_PAUSE_S = 1.0


class Task:
    """
    Runs *turn* until told to stop.

    An exception in a turn is logged with its traceback, counted, and the next turn is tried after a pause: one part
    that fails must not take the others down.

    Args:
        name: of the thread, in `status` and in the log.

        turn: one round of work, at most a second or so; returns False when there is nothing left to do for ever.
    """

    def __init__(self, name: str, turn: Callable[[], bool]) -> None:
        self.name = name
        self._turn = turn
        self._stopping = threading.Event()
        self._thread = threading.Thread(target=self._run, name=name, daemon=True)
        self._beat_ns = time.monotonic_ns()
        self.errors = 0
        self.last_error = ""

    def start(self) -> None:
        """Begin."""
        self._thread.start()

    def stop(self) -> None:
        """Ask it to end after its turn."""
        self._stopping.set()

    def join(self, timeout_s: float) -> bool:
        """Wait for its end; return whether it came."""
        self._thread.join(timeout_s)
        return not self._thread.is_alive()

    def wait(self, timeout_s: float) -> bool:
        """Sleep in a turn; return True at once when the task is to end."""
        return self._stopping.wait(timeout_s)

    @property
    def stopping(self) -> bool:
        """Whether it has been asked to end."""
        return self._stopping.is_set()

    @property
    def alive(self) -> bool:
        """Whether it runs."""
        return self._thread.is_alive()

    @property
    def age_s(self) -> float:
        """Seconds since it last began a turn."""
        return (time.monotonic_ns() - self._beat_ns) / 1e9

    def _run(self) -> None:
        while not self._stopping.is_set():
            self._beat_ns = time.monotonic_ns()
            try:
                if not self._turn():
                    return
            except Exception as error:  # noqa: BLE001 - the task's edge: log once, count, go on
                self.errors += 1
                self.last_error = f"{type(error).__name__}: {error}"
                _log.exception("task_failed", task=self.name, count=self.errors)
                self._stopping.wait(_PAUSE_S)
