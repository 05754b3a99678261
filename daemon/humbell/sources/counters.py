"""What became of the blocks that a source was sent: none is lost without being counted."""

from collections import Counter
from collections.abc import Callable, Mapping
from dataclasses import dataclass


@dataclass(frozen=True, slots=True)
class SourceCounters:
    """
    The counts of one source at one moment.

    Args:
        received: blocks taken over from the sender, in whatever state.

        accepted: of these, handed over to be measured.

        dropped: of these, thrown away, by reason.

        queued: of these, waiting to be read.

        held: waiting for room in the queue; the broker still has them, so they are not yet received.

        last_block_age_s: seconds since the newest of the accepted blocks came in; None where there is none.
    """

    received: int
    accepted: int
    dropped: Mapping[str, int]
    queued: int
    held: int
    last_block_age_s: float | None

    @property
    def balanced(self) -> bool:
        """Whether received = accepted + dropped + queued."""
        return self.received == self.accepted + sum(self.dropped.values()) + self.queued


class Tally:
    """
    Counts for a source, which guards it with the lock of its queue: so the counts of one moment belong together.

    Args:
        clock: monotonic, seconds.
    """

    def __init__(self, clock: Callable[[], float]) -> None:
        self._clock = clock
        self._received = 0
        self._accepted = 0
        self._dropped: Counter[str] = Counter()
        self._last_s: float | None = None

    def receive(self) -> None:
        """Count a block taken over."""
        self._received += 1

    def accept(self, came_s: float) -> None:
        """Count a block that came in at *came_s* as handed over."""
        self._accepted += 1
        self._last_s = came_s

    def drop(self, reason: str) -> bool:
        """Count a block as thrown away; return whether it is the first for that reason."""
        self._dropped[reason] += 1
        return self._dropped[reason] == 1

    def snapshot(self, queued: int, held: int) -> SourceCounters:
        """Return the counts of now, with *queued* blocks waiting to be read and *held* ones for room."""
        return SourceCounters(
            received=self._received,
            accepted=self._accepted,
            dropped=dict(self._dropped),
            queued=queued,
            held=held,
            last_block_age_s=None if self._last_s is None else self._clock() - self._last_s,
        )
