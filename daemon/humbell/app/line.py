"""One source's way from blocks to readings, with every second accounted for: measured, silent, or before our time."""

from collections.abc import Iterator, Mapping
from dataclasses import dataclass, replace

from humbell.app.wiring import bands_of, plan_points, points_of
from humbell.config import Site
from humbell.measures import MEASURES, Bank
from humbell.model import Block, Cause, PointId, Quality, Reading, SampleUnit
from humbell.sources import Continuity, Join

# What leaves a stream unbroken; anything else ends it.
_UNBROKEN = frozenset({Join.CONTINUES, Join.PIECE})
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


class Line:
    """
    Continuity and measures of one source.

    Args:
        site: the configuration.

        source: id of the source.
    """

    def __init__(self, site: Site, source: str) -> None:
        self._site = site
        self._source = source
        self._measures = {
            name: [measure for quantity, _ in bands_of(point) for measure in MEASURES[quantity]]
            for name, point in points_of(site)
            if point.channel.source == source
        }
        self._continuity = Continuity()
        self._kind: SignalKind | None = None
        self._bank: Bank | None = None
        # Every second before it is accounted for; 0 until anything is known.
        self._until_ns = 0
        self._started_ns: int | None = None
        self._resume: dict[PointId, int] = {}
        self._is_silent = self._is_piece = False
        self.late_blocks = 0

    @property
    def continuity(self) -> Continuity:
        """What joins up, with its counters."""
        return self._continuity

    @property
    def refused_blocks(self) -> int:
        """Blocks that came twice or too late, and so were not measured."""
        return self._continuity.duplicate_blocks + self._continuity.late_blocks + self.late_blocks

    def resume(self, ends_ns: Mapping[PointId, int], started_ns: int) -> None:
        """
        Go on from a journal.

        Args:
            ends_ns: UTC up to which the readings of each point are committed.

            started_ns: UTC of the start of the service; what lies before it is told as "daemon down".
        """
        self._resume = {name: ends_ns[name] for name in self._measures if name in ends_ns}
        self._until_ns = max(self._resume.values(), default=started_ns)
        self._started_ns = started_ns

    def prepare(self, kind: SignalKind) -> Bank:
        """
        Return a bank for blocks of such a kind.

        Raises:
            ConfigError: they lack a channel or a sensitivity, or cannot carry a band.
        """
        return Bank(kind.rate_hz, plan_points(self._site, self._source, kind.unit, kind.channels), kind.full_scale)

    def feed(self, block: Block) -> list[Reading]:
        """
        Return the readings that *block* makes possible, and what was lost before it.

        Raises:
            ConfigError: see `prepare`.
        """
        kind = SignalKind.of(block)
        # Before all else: a block that cannot be measured leaves all as it is, and so will be missed by the next one.
        bank = self._bank if self._bank is not None and kind == self._kind else self.prepare(kind)
        join = self._continuity.feed(block)
        if join.join in _DROPPED:
            return []
        fresh = self._unaccounted(block)
        if fresh is None:
            self.late_blocks += 1
            return []
        readings: list[Reading] = []
        if self._bank is None:
            readings += self._before_the_first(fresh.start_ns)
        elif self._is_silent:
            readings += self._nothing(self._until_ns, fresh.start_ns)
        elif join.join not in _UNBROKEN or bank is not self._bank or (fresh.piece and not self._is_piece):
            # What waited is told at its own time, unless something was lost behind it.
            end_ns = max(fresh.start_ns, self._until_ns) if join.missing_s > 0 else self._until_ns
            readings += self._bank.reset(join.missing_s, end_ns)
        self._is_silent, self._is_piece = False, fresh.piece
        self._bank, self._kind = bank, kind
        self._until_ns = fresh.end_ns
        return readings + bank.feed(fresh)

    def silence(self, until_ns: int) -> list[Reading]:
        """
        Return that there were no samples until *until_ns*. Blocks from before it come too late from now on.

        Args:
            until_ns: UTC, ns since 1970.
        """
        readings: list[Reading] = []
        if self._bank is None:
            readings += self._before_the_first(until_ns)
        elif not self._is_silent:
            readings += self._bank.reset(0.0, self._until_ns)
        readings += self._nothing(self._until_ns, until_ns)
        self._until_ns = max(until_ns, self._until_ns)
        self._is_silent = True
        return readings

    def end(self) -> list[Reading]:
        """Return the last readings of a source that has ended."""
        return [] if self._bank is None else self._bank.reset(0.0, self._until_ns)

    def _unaccounted(self, block: Block) -> Block | None:
        """Return the part of *block* whose seconds are not accounted for yet; None where there is none."""
        after_a_break = self._is_silent or (self._bank is None and bool(self._resume))
        if not after_a_break or block.start_ns >= self._until_ns:
            return block
        skip = -(-(self._until_ns - block.start_ns) * block.rate_hz // 10**9)
        skipped = int(skip)
        if block.piece or skipped >= block.length:
            return None
        start_ns = block.start_ns + round(skipped * 1e9 / block.rate_hz)
        return replace(block, samples=block.samples[:, skipped:], start_ns=start_ns)

    def _before_the_first(self, until_ns: int) -> Iterator[Reading]:
        """Tell what lies between the journal's end and *until_ns*: we were not running, then nothing came."""
        started_ns = self._started_ns
        if started_ns is None:
            return
        down_until_ns = min(until_ns, started_ns)
        for name, end_ns in self._resume.items():
            yield from self._lost(name, Cause.DAEMON_DOWN, end_ns, down_until_ns)
        self._resume = {}
        self._until_ns = max(self._until_ns, down_until_ns)
        yield from self._nothing(self._until_ns, until_ns)
        self._until_ns = max(self._until_ns, until_ns)

    def _nothing(self, from_ns: int, until_ns: int) -> Iterator[Reading]:
        for name in self._measures:
            yield from self._lost(name, Cause.NO_SAMPLES, from_ns, until_ns)

    def _lost(self, name: PointId, cause: Cause, from_ns: int, until_ns: int) -> Iterator[Reading]:
        if until_ns <= from_ns:
            return
        for measure in self._measures[name]:
            yield Reading(
                time_ns=until_ns,
                machine=name.machine,
                point=name.point,
                measure=measure,
                value=float("nan"),
                span_s=(until_ns - from_ns) / 1e9,
                quality=Quality.BAD,
                cause=cause,
            )
