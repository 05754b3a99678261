"""What a link is to be subscribed to, what it has asked for, and what it got. Pure; safe in several threads."""

import threading
from collections.abc import Iterable

from humbell.wire.events import Reason, Subscribed

ASK_AGAIN_S = 30.0  # for topics that were denied: somebody may have allowed them by now


class Subscriptions:
    """
    Topics by their state on the connection in force.

    Times are of one monotonic clock, in seconds.
    """

    def __init__(self) -> None:
        self._lock = threading.Lock()
        self._wanted: set[str] = set()
        self._asked: dict[int, tuple[list[str], float]] = {}
        self._granted: set[str] = set()
        self._denied: dict[str, Reason] = {}
        self._again_s = 0.0

    def want(self, topics: Iterable[str]) -> None:
        """Have *topics* from now on."""
        with self._lock:
            self._wanted.update(topics)

    def drop(self, topics: Iterable[str]) -> None:
        """Have *topics* no more, not even where an earlier run of ours has subscribed to them."""
        with self._lock:
            self._wanted.difference_update(topics)
            self._granted.update(topics)

    def renew(self) -> None:
        """Forget what was asked for: there is a new connection."""
        with self._lock:
            self._asked.clear()
            self._granted.clear()
            self._denied.clear()

    def due(self, now_s: float) -> tuple[list[str], list[str]]:
        """Return what is to be subscribed to, and what is to be unsubscribed from (told once), in order."""
        with self._lock:
            if self._denied and now_s >= self._again_s:
                self._denied.clear()
            asked = {topic for topics, _ in self._asked.values() for topic in topics}
            unwanted = self._granted - self._wanted
            self._granted -= unwanted
            return sorted(self._wanted - asked - self._granted - self._denied.keys()), sorted(unwanted)

    def ask(self, mid: int, topics: list[str], now_s: float) -> None:
        """Remember that *topics* were asked for with request *mid*."""
        with self._lock:
            self._asked[mid] = (topics, now_s)

    def answer(self, event: Subscribed, now_s: float) -> dict[str, Reason]:
        """Take the broker's answer; return what it denies."""
        with self._lock:
            topics, _ = self._asked.pop(event.mid, ([], 0.0))
            reasons = dict(zip(topics, event.reasons, strict=False))
            denied = {topic: reason for topic, reason in reasons.items() if reason.failed}
            self._granted |= reasons.keys() - denied.keys()
            if denied:
                self._denied |= denied
                self._again_s = now_s + ASK_AGAIN_S
            return denied

    @property
    def denied(self) -> dict[str, Reason]:
        """What the broker denied."""
        with self._lock:
            return {topic: reason for topic, reason in self._denied.items() if topic in self._wanted}

    @property
    def settled(self) -> bool:
        """Whether the broker has answered for all that is wanted."""
        with self._lock:
            return self._wanted <= self._granted | self._denied.keys()

    def overdue(self, now_s: float, after_s: float) -> bool:
        """Return whether the broker has kept an answer back for longer than *after_s*."""
        with self._lock:
            return any(now_s - asked_s > after_s for _, asked_s in self._asked.values())
