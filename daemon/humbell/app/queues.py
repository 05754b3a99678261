"""Bounded queues that count: what went in, what was refused, how full it ever was."""

import threading
from collections import deque
from dataclasses import dataclass
from typing import Generic, TypeVar

T = TypeVar("T")


@dataclass(frozen=True, slots=True)
class QueueState:
    """
    How a queue is doing.

    Args:
        name: of the queue.

        length: items in it.

        bound: items that it takes.

        highest: most items ever in it.

        passed: items that went in.

        dropped: items that were thrown away to make room.
    """

    name: str
    length: int
    bound: int
    highest: int
    passed: int
    dropped: int


class BoundedQueue(Generic[T]):
    """
    A queue between two threads.

    Args:
        name: for `status`.

        bound: items that it takes.
    """

    def __init__(self, name: str, bound: int) -> None:
        self._name = name
        self._bound = bound
        self._items: deque[T] = deque()
        self._changed = threading.Condition()
        self._highest = self._passed = self._dropped = 0

    @property
    def state(self) -> QueueState:
        """How it is doing."""
        with self._changed:
            return QueueState(self._name, len(self._items), self._bound, self._highest, self._passed, self._dropped)

    def put(self, item: T, timeout_s: float) -> bool:
        """Add *item* when there is room; return whether there was within *timeout_s*."""
        with self._changed:
            if not self._changed.wait_for(lambda: len(self._items) < self._bound, timeout_s):
                return False
            self._append(item)
            return True

    def push(self, item: T) -> T | None:
        """Add *item* at once; where there is no room, the oldest one is dropped for it, counted, and returned."""
        with self._changed:
            oldest = None
            if len(self._items) >= self._bound:
                oldest = self._items.popleft()
                self._dropped += 1
            self._append(item)
            return oldest

    def get(self, timeout_s: float) -> T | None:
        """Return the oldest item, or None where none came within *timeout_s*."""
        with self._changed:
            if not self._changed.wait_for(lambda: self._items, timeout_s):
                return None
            item = self._items.popleft()
            self._changed.notify_all()
            return item

    def _append(self, item: T) -> None:
        self._items.append(item)
        self._passed += 1
        self._highest = max(self._highest, len(self._items))
        self._changed.notify_all()
