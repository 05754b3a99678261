"""Which blocks of one source join up: gaps, restarts, repetitions. Pure; bridges nothing."""

from collections import deque
from dataclasses import dataclass
from enum import StrEnum

from humbell.model import Block

# Seconds. Small senders stamp a block when its last sample has come in, some tens of ms early or late as their
# scheduler has it. Times can show no loss shorter than that; lost blocks show in the sequence numbers.
TOLERANCE_S = 0.05

# Blocks. A minute at 4 blocks a second: longer than a broker's redelivery after a broken connection lies back.
WINDOW_BLOCKS = 256


class Join(StrEnum):
    """How a block stands to what came before it."""

    FIRST = "first"
    CONTINUES = "continues"
    GAP = "gap"
    RESTART = "restart"
    DUPLICATE = "duplicate"
    LATE = "late"
    PIECE = "piece"


@dataclass(frozen=True, slots=True)
class Continuation:
    """
    How one block stands to what came before it.

    Args:
        join: the relation. DUPLICATE and LATE blocks are to be dropped; at all others but CONTINUES filters start anew.

        missing_s: seconds of signal that are missing before the block; 0 where none are, or where time went backwards.
    """

    join: Join
    missing_s: float = 0.0


class Continuity:
    """
    Follows the blocks of one source.

    Each block is compared with the end of the last one, never with an anchor: a sender's clock that drifts against its
    sample rate (200 ppm are 50 µs a block) adds up to no gap.

    Args:
        tolerance_s: by how much the start of a block may miss the end of the last one.

        window_blocks: how many blocks back a repetition is known as one.

    Attributes:
        acquired_samples: in each channel, of all blocks but DUPLICATE and LATE ones.

        missing_samples: in each channel, by the times and numbers of the blocks around them.

        lost_blocks: sequence numbers that were left out. A LATE block may have brought one after all.

        duplicate_blocks: that came again.

        late_blocks: that came when their successors had been used.

        gaps: blocks before which signal of the same run is missing.

        restarts: blocks that began a new run.
    """

    def __init__(self, tolerance_s: float = TOLERANCE_S, window_blocks: int = WINDOW_BLOCKS) -> None:
        self._tolerance_s = tolerance_s
        self._last: _Seen | None = None
        # Bounded: the oldest fall out.
        self._recent: deque[tuple[str, int]] = deque(maxlen=window_blocks)
        self.acquired_samples = 0
        self.missing_samples = 0
        self.lost_blocks = 0
        self.duplicate_blocks = 0
        self.late_blocks = 0
        self.gaps = 0
        self.restarts = 0

    def feed(self, block: Block) -> Continuation:
        """
        Return how *block* stands to those fed before it, and remember it.

        A block that repeats one of the last seen is DUPLICATE; one with a lower number than the last, or of an earlier
        run and from before the end of the last, is LATE: both change nothing but their counters. A piece is PIECE, even
        the first. A new boot id, rate or number of channels is a RESTART, and so is a stream behind a piece (with
        nothing missing: a sensor that sends pieces sleeps between them). A number left out is a GAP, and so is a time
        that does not fit, forwards or backwards.
        """
        last = self._last
        key = (block.boot, block.seq)
        if key in self._recent or (last is not None and key == last.key):
            self.duplicate_blocks += 1
            return Continuation(Join.DUPLICATE)
        if last is not None and self._late(last, block):
            self.late_blocks += 1
            return Continuation(Join.LATE)
        found = self._judge(last, block)
        self._count(found, last, block)
        self._recent.append(key)
        self._last = _Seen(key, block.rate_hz, block.channels, block.length, block.end_ns, block.piece)
        return found

    def _late(self, last: "_Seen", block: Block) -> bool:
        if block.boot == last.key[0]:
            return block.seq < last.key[1]
        # The rest of a sender's queue from before its restart.
        return block.start_ns < last.end_ns and any(block.boot == boot for boot, _ in self._recent)

    def _judge(self, last: "_Seen | None", block: Block) -> Continuation:
        if block.piece:
            return Continuation(Join.PIECE)
        if last is None or last.piece:
            return Continuation(Join.FIRST if last is None else Join.RESTART)
        away_s = (block.start_ns - last.end_ns) / 1e9
        missing_s = max(0.0, away_s)
        if block.boot != last.key[0] or block.rate_hz != last.rate_hz or block.channels != last.channels:
            return Continuation(Join.RESTART, missing_s)
        lost = block.seq - last.key[1] - 1
        if lost:
            return Continuation(Join.GAP, missing_s or lost * last.length / last.rate_hz)
        if abs(away_s) > self._tolerance_s:
            return Continuation(Join.GAP, missing_s)
        return Continuation(Join.CONTINUES)

    def _count(self, found: Continuation, last: "_Seen | None", block: Block) -> None:
        self.acquired_samples += block.length
        self.missing_samples += round(found.missing_s * block.rate_hz)
        self.gaps += found.join is Join.GAP
        self.restarts += found.join is Join.RESTART
        if last is not None and last.key[0] == block.boot:
            self.lost_blocks += block.seq - last.key[1] - 1


@dataclass(frozen=True, slots=True)
class _Seen:
    """What is remembered of the last block: not its samples."""

    key: tuple[str, int]
    rate_hz: float
    channels: int
    length: int
    end_ns: int
    piece: bool
