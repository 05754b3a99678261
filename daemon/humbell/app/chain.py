"""The way of the data inside the node: blocks in, readings and transitions out. Knows no files, sockets or clocks."""

from collections.abc import Iterator
from dataclasses import dataclass

from humbell.alarms import Book, NameOccurrence
from humbell.app.wiring import plan_all_alarms, plan_points
from humbell.config import Site
from humbell.measures import Bank
from humbell.model import Block, Reading, SampleUnit, Transition
from humbell.sources import Continuity, Join

_DROPPED = frozenset({Join.DUPLICATE, Join.LATE})


@dataclass(frozen=True, slots=True)
class SignalKind:
    """
    What must be the same for two blocks to be measured alike.

    Args:
        rate_hz: samples a second and channel.

        unit: of the samples.

        channels: number of channels.

        full_scale: largest magnitude of a sample, in *unit*; None where unknown.
    """

    rate_hz: float
    unit: SampleUnit
    channels: int
    full_scale: float | None

    @classmethod
    def of(cls, block: Block) -> "SignalKind":
        """Return the kind of *block*."""
        return cls(block.rate_hz, block.unit, block.channels, block.full_scale)


class _Line:
    """One source's way to readings."""

    def __init__(self, site: Site, source: str) -> None:
        self._site = site
        self._source = source
        self._continuity = Continuity()
        self._kind: SignalKind | None = None
        self._bank: Bank | None = None
        self._end_ns = 0
        self._streaming = False

    def prepare(self, kind: SignalKind) -> Bank:
        points = plan_points(self._site, self._source, kind.unit, kind.channels)
        return Bank(kind.rate_hz, points, kind.full_scale)

    def feed(self, block: Block) -> list[Reading]:
        join = self._continuity.feed(block)
        if join.join in _DROPPED:
            return []
        readings = []
        kind = SignalKind.of(block)
        # What waits for the rest of its frame is told before anything that does not follow on it.
        if self._bank is not None and self._streaming and (join.join is not Join.CONTINUES or kind != self._kind):
            lost_until_ns = max(block.start_ns, self._end_ns) if join.missing_s > 0 else self._end_ns
            readings = self._bank.reset(join.missing_s, lost_until_ns)
        if self._bank is None or kind != self._kind:
            self._bank, self._kind = self.prepare(kind), kind
        self._end_ns = block.end_ns
        self._streaming = not block.piece
        return readings + self._bank.feed(block)

    def end(self) -> list[Reading]:
        return [] if self._bank is None else self._bank.reset(0.0, self._end_ns)


class Chain:
    """
    Continuity, measures and alarms of all sources of a node.

    Args:
        site: the configuration.

        name_occurrence: names the occurrences of alarms.
    """

    def __init__(self, site: Site, name_occurrence: NameOccurrence) -> None:
        self._lines = {source: _Line(site, source) for source in site.sources}
        self.book = Book(plan_all_alarms(site), name_occurrence)

    def prepare(self, source: str, kind: SignalKind) -> None:
        """
        Try whether blocks of such a kind can be measured.

        Raises:
            ConfigError: they lack a channel or a sensitivity, or cannot carry a band.
        """
        self._lines[source].prepare(kind)

    def feed(self, block: Block) -> Iterator[Reading | Transition]:
        """
        Return what *block* brings, each reading followed by the transitions that it causes.

        Raises:
            ConfigError: see `prepare`.
        """
        return self._judge(self._lines[block.source].feed(block))

    def end(self, source: str) -> Iterator[Reading | Transition]:
        """Return what is still to be had from a source that has ended."""
        return self._judge(self._lines[source].end())

    def _judge(self, readings: list[Reading]) -> Iterator[Reading | Transition]:
        for reading in readings:
            yield reading
            yield from self.book.feed(reading)
