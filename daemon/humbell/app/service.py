"""The running service: makes all parts, starts them in order, and stops them along the flow in bounded time."""

import time
from collections.abc import Callable, Sequence

import structlog

from humbell.app.board import Board
from humbell.app.chain import Chain
from humbell.app.identity import read_serial
from humbell.app.intake import Intake
from humbell.app.keeper import Keeper
from humbell.app.measuring import Measuring
from humbell.app.queues import BoundedQueue
from humbell.app.submit import Submit
from humbell.app.wiring import JUDGED, bands_of, node_id, occurrence_names, points_of
from humbell.config import Loaded
from humbell.journal import Journal, Watched
from humbell.model import Block, Moment
from humbell.sources import Source

_log = structlog.get_logger()
# 16 s at 4 blocks a second: outlasts a slow computation, and is bounded in memory (16 channels at 51.2 kS/s: 52 MB).
_BLOCKS = 64
# How long each stage may take to end. All together stay below the 10 s after which systemd kills.
_STOP_S = 2.0


class Service:
    """
    One node at work.

    Args:
        loaded: the configuration.

        sources: where samples come from.

        now: the moment, by both clocks.
    """

    def __init__(self, loaded: Loaded, sources: Sequence[Source], now: Callable[[], Moment]) -> None:
        self.loaded = loaded
        self.node = node_id(loaded.site, read_serial)
        self._now = now
        self.started_ns = time.monotonic_ns()
        self.board = Board()
        self.blocks: BoundedQueue[Block] = BoundedQueue("blocks", _BLOCKS)
        self.intakes = [Intake(source, self.blocks) for source in sources]
        journal = Journal(loaded.site.journal, watched(loaded), now)
        resumed = journal.open()
        self.keeper = Keeper(journal)
        if resumed.put_aside is not None:
            self.keeper.put_aside = str(resumed.put_aside)
            _log.error("journal_put_aside", path=self.keeper.put_aside)
        self.chain = Chain(loaded.site, occurrence_names(loaded.site, self.node), resumed.states)
        self.chain.resume(resumed.ends_ns, now().utc_ns)
        self.measuring = Measuring(self.chain, self.blocks, self.intakes, self.keeper.give, self.board, now)
        self.submit = Submit(self.board, self.keeper.note, self.measuring.act)
        self.board.show((), dict(self.chain.book.states))

    def start(self) -> None:
        """Start every task, the last in the flow first."""
        self.keeper.task.start()
        self.measuring.task.start()
        for intake in self.intakes:
            intake.start()

    @property
    def ended(self) -> bool:
        """Whether every source has ended, which live ones never do."""
        return bool(self.intakes) and all(intake.ended for intake in self.intakes)

    def stop(self) -> bool:
        """Stop every task along the flow, write what waits, and return whether all of them ended in time."""
        for intake in self.intakes:
            intake.task.stop()
            intake.close()
        joined = [intake.task.join(_STOP_S) for intake in self.intakes]
        clean = all(joined)
        self.measuring.task.stop()
        if self.measuring.task.join(_STOP_S):
            self.measuring.finish()
        else:
            clean = False
        self.keeper.task.stop()
        if not (self.keeper.task.join(_STOP_S) and self.keeper.finish()):
            clean = False
        _log.info("stopped", clean=clean)
        return clean


def watched(loaded: Loaded) -> Watched:
    """Return what the journal has to know of a configuration."""
    points = list(points_of(loaded.site))
    return Watched(
        digest=loaded.digest,
        content=loaded.text,
        counted={name: JUDGED[quantity] for name, point in points for quantity, _ in list(bands_of(point))[:1]},
        judged={
            (name, JUDGED[quantity])
            for name, point in points
            for quantity, settings in bands_of(point)
            if settings.high is not None or settings.high_high is not None
        },
        kept=set(JUDGED.values()),
    )
