"""Which blocks have been seen before. Pure; remembers a bounded number of senders' runs and of numbers in each."""

from collections import OrderedDict

# Numbers. 4 min at 4 blocks a second: a broker sends what was not acknowledged again when the connection is back.
WINDOW = 1024
# Runs. Several senders on one topic, and each of them restarted now and then.
BOOTS = 8


class Repeats:
    """
    Remembers boot ids and sequence numbers.

    Args:
        window: how far behind the highest number of its run a number is known for certain.

        boots: how many runs are remembered; the one not heard of for longest is forgotten first.
    """

    def __init__(self, window: int = WINDOW, boots: int = BOOTS) -> None:
        self._window = window
        self._boots = boots
        self._runs: OrderedDict[str, _Run] = OrderedDict()

    def __len__(self) -> int:
        """Number of blocks that are remembered."""
        return sum(len(run.seen) for run in self._runs.values())

    def judge(self, boot: str, seq: int) -> str | None:
        """Return ``duplicate``, or ``old_number`` for one that can no longer be told from a repetition, or None."""
        run = self._runs.get(boot)
        if run is None:
            return None
        if seq in run.seen:
            return "duplicate"
        return "old_number" if seq <= run.highest - self._window else None

    def remember(self, boot: str, seq: int) -> None:
        """Know this block from now on."""
        run = self._runs.setdefault(boot, _Run())
        self._runs.move_to_end(boot)
        if len(self._runs) > self._boots:
            self._runs.popitem(last=False)
        run.seen.add(seq)
        run.highest = max(run.highest, seq)
        # Now and then, so that it costs next to nothing a block.
        if len(run.seen) >= 2 * self._window:
            run.seen = {one for one in run.seen if one > run.highest - self._window}


class _Run:
    def __init__(self) -> None:
        self.seen: set[int] = set()
        self.highest = -1
