"""A clock that only waiting moves, for the tests of what is paced."""

import threading


class Clock:
    """Time that stands still until somebody waits, or it is moved on."""

    def __init__(self) -> None:
        self.now_s = 1000.0
        self.waits_s: list[float] = []

    def monotonic(self) -> float:
        """Return the time, s."""
        return self.now_s

    def event(self) -> "ClockEvent":
        """Return an event whose waiting moves this clock."""
        return ClockEvent(self)


class ClockEvent(threading.Event):
    """
    An event that takes its waiting from a clock instead of from our time.

    Args:
        clock: that it moves.
    """

    def __init__(self, clock: Clock) -> None:
        super().__init__()
        self._clock = clock

    def wait(self, timeout: float | None = None) -> bool:
        """Move the clock on by *timeout*, unless the event is set."""
        assert timeout is not None, "waits have an end"
        if not self.is_set():
            self._clock.waits_s.append(timeout)
            self._clock.now_s += timeout
        return self.is_set()
