"""How long to wait before trying again. Pure: random numbers are passed in."""

from collections.abc import Callable

FIRST_S = 0.5  # a broker that was restarted is back in about that
MOST_S = 8.0  # so that a link is up again within 10 s of the end of a fault
# What only a person can cure is asked about seldom: brokers lock out who asks too often, and two nodes that share an id
# throw each other out at most twice a minute.
PATIENT_S = 30.0


BREAKS = 4  # in a row; a broker that is restarted is away between two of them
BREAK_S = 60.0  # two nodes that throw each other out, each after `PATIENT_S` or twice that, stay below it


class Breaks:
    """Finds out that connections break again and again: some brokers do not say that another client has the same id."""

    def __init__(self) -> None:
        self._count = 0

    def count(self, *, lasted_s: float) -> bool:
        """Count a connection that broke after *lasted_s* for no known reason; return whether that is a habit by now."""
        self._count = self._count + 1 if lasted_s < BREAK_S else 0
        return self._count >= BREAKS

    def reset(self) -> None:
        """Begin anew: something else has happened in between."""
        self._count = 0


class Backoff:
    """
    Waiting times that double from try to try, each of them spread so that nodes do not come back all at once.

    Args:
        random: returns a number from 0 to 1.

        first_s: the first time, at most.

        most_s: the longest time.
    """

    def __init__(self, random: Callable[[], float], first_s: float = FIRST_S, most_s: float = MOST_S) -> None:
        self._random = random
        self._first_s = first_s
        self._most_s = most_s
        self._next_s = first_s

    def next_s(self, *, patient: bool = False) -> float:
        """Return how long to wait now: half to all of the time in turn, or, *patient*, `PATIENT_S` to twice that."""
        if patient:
            return PATIENT_S * (1 + self._random())
        now_s, self._next_s = self._next_s, min(2 * self._next_s, self._most_s)
        return now_s * (1 + self._random()) / 2

    def reset(self) -> None:
        """Begin anew: what was tried has worked."""
        self._next_s = self._first_s
