"""The way of the data inside the node: blocks in, readings and transitions out. Knows no files, sockets or clocks."""

from collections.abc import Iterable, Iterator, Mapping

from humbell.alarms import AlarmState, Book, NameOccurrence
from humbell.app.line import Line, SignalKind
from humbell.app.wiring import plan_all_alarms
from humbell.config import Site
from humbell.model import AlarmId, Block, PointId, Reading, Transition


class Chain:
    """
    Continuity, measures and alarms of all sources of a node.

    Args:
        site: the configuration.

        name_occurrence: names the occurrences of alarms.

        states: of the alarms, read back after a restart.
    """

    def __init__(
        self,
        site: Site,
        name_occurrence: NameOccurrence,
        states: Mapping[AlarmId, AlarmState] | None = None,
    ) -> None:
        self.lines = {source: Line(site, source) for source in site.sources}
        self.book = Book(plan_all_alarms(site), name_occurrence, states)

    def resume(self, ends_ns: Mapping[PointId, int], started_ns: int) -> None:
        """Go on from a journal; see `Line.resume`."""
        for line in self.lines.values():
            line.resume(ends_ns, started_ns)

    def prepare(self, source: str, kind: SignalKind) -> None:
        """
        Try whether blocks of such a kind can be measured.

        Raises:
            ConfigError: they lack a channel or a sensitivity, or cannot carry a band.
        """
        self.lines[source].prepare(kind)

    def feed(self, block: Block) -> Iterator[Reading | Transition]:
        """
        Return what *block* brings, each reading followed by the transitions that it causes.

        Raises:
            ConfigError: see `prepare`.
        """
        return self._judge(self.lines[block.source].feed(block))

    def silence(self, source: str, until_ns: int) -> Iterator[Reading | Transition]:
        """Return what it brings that *source* has sent nothing until *until_ns*, UTC ns since 1970."""
        return self._judge(self.lines[source].silence(until_ns))

    def end(self, source: str) -> Iterator[Reading | Transition]:
        """Return what is still to be had from a source that has ended."""
        return self._judge(self.lines[source].end())

    def _judge(self, readings: Iterable[Reading]) -> Iterator[Reading | Transition]:
        for reading in readings:
            yield reading
            yield from self.book.feed(reading)
