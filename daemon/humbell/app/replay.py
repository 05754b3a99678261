"""Runs recorded files through the same chain as live signals, as fast as they are read."""

from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass
from pathlib import Path

from humbell.app.chain import Chain
from humbell.app.line import SignalKind
from humbell.app.tally import Tally
from humbell.app.wiring import node_id, occurrence_names, points_of
from humbell.config import Site
from humbell.model import ChannelId, ConfigError, Coverage, PointId, Reading, Transition
from humbell.sources import EndOfSource, Recording, ReplaySettings, ReplaySource

# The year 2200: what lies beyond is no time that anybody means, and calendars of computers end somewhere.
_LATEST_S = 7_258_118_400.0


@dataclass(frozen=True, slots=True)
class ReplayRequest:
    """
    What is to be replayed.

    Args:
        files: one after the other, as one source.

        channels: the channel of a point, where it is another than configured; a source named "" stands for the files.

        start_ns: UTC of the first sample, ns since 1970; None to use the files' own times.

        piece_every_s: seconds between the starts of pieces; None to use the files' own times.
    """

    files: Sequence[Path]
    channels: dict[PointId, ChannelId]
    start_ns: int | None = None
    piece_every_s: float | None = None


class Replay:
    """
    One replay, checked and ready.

    Args:
        site: the configuration.

        request: what is to be replayed.

        read_serial: returns the computer's serial number, from which the node's id is made where it has none.

    Raises:
        ConfigError: files, points and configuration do not fit together.

        InputError: a file is not what it says it is.
    """

    def __init__(self, site: Site, request: ReplayRequest, read_serial: Callable[[], str]) -> None:
        source, settings = _replay_source(site)
        self.site = _played(site, source, settings, request.channels)
        self._source = ReplaySource(
            source, settings, request.files, request.start_ns, piece_every_s=request.piece_every_s
        )
        self._source.open()
        _check_end(self._source.recordings[-1], request)
        self._chain = Chain(self.site, occurrence_names(site, node_id(site, read_serial)))
        self._tally = Tally(self.site)
        for recording in self._source.recordings:
            kind = SignalKind(recording.rate_hz, recording.unit, recording.channels, None)
            try:
                self._chain.prepare(source, kind)
            except ConfigError as error:
                raise ConfigError(*(f"{recording.path}: {problem}" for problem in error.problems)) from None

    @property
    def recordings(self) -> Sequence[Recording]:
        """What the files hold."""
        return self._source.recordings

    @property
    def seconds(self) -> float:
        """Seconds of signal in all files."""
        return self._source.seconds

    def run(self, progress: Callable[[float], None]) -> Iterator[Reading | Transition]:
        """
        Return readings and transitions in order of time.

        Args:
            progress: is told the seconds of signal played so far.
        """
        played_s = 0.0
        try:
            while True:
                block = self._source.read(0.0)
                if block is None:
                    continue
                yield from self._counted(self._chain.feed(block))
                played_s += block.length / block.rate_hz
                progress(played_s)
        except EndOfSource:
            yield from self._counted(self._chain.end(self._source.name))
        finally:
            self._source.close()

    def coverage(self) -> Iterator[tuple[PointId, dict[Coverage, float]]]:
        """Return the coverage of each point, once the replay has run."""
        for name, _ in points_of(self.site):
            yield name, dict(self._tally.seconds(name))

    def _counted(self, told: Iterator[Reading | Transition]) -> Iterator[Reading | Transition]:
        for one in told:
            if isinstance(one, Reading):
                self._tally.feed(one)
            yield one


def _check_end(last: Recording, request: ReplayRequest) -> None:
    every_s = request.piece_every_s or last.length / last.rate_hz
    if last.start_ns / 1e9 + max(last.pieces, 1) * every_s > _LATEST_S:
        raise ConfigError("the replay would end in the year 2200 or later (give an earlier --start, or a shorter time)")


def _replay_source(site: Site) -> tuple[str, ReplaySettings]:
    """Return the source that stands for the files: the first one of that kind."""
    for name, settings in site.sources.items():
        if settings.kind == "replay":
            return name, settings
    raise ConfigError("sources: none is of the kind replay (add one: tape: {kind: replay})")


def _played(site: Site, source: str, settings: ReplaySettings, channels: dict[PointId, ChannelId]) -> Site:
    """Return *site* with the given channels, and with nothing but what is played."""
    known = {name for name, _ in points_of(site)}
    problems = [
        f"--point {name}: there is no such point (known: {', '.join(map(str, sorted(known)))})"
        for name in channels
        if name not in known
    ]
    problems += [
        f"--point {name}={channel}: the files are source {source} (give {source}/{channel.index})"
        for name, channel in channels.items()
        if channel.source not in {"", source}
    ]
    if problems:
        raise ConfigError(*problems)
    machines = {}
    for machine, chosen in site.machines.items():
        points = {}
        for point, kept in chosen.points.items():
            given = channels.get(PointId(machine, point))
            channel = kept.channel if given is None else ChannelId(source, given.index)
            if channel.source == source:
                points[point] = kept.model_copy(update={"channel": channel})
        if points:
            machines[machine] = chosen.model_copy(update={"points": points})
    if not machines:
        raise ConfigError(f"machines: no point has a channel of {source} (give --point MACHINE/POINT={source}/0)")
    return site.model_copy(update={"sources": {source: settings}, "machines": machines})
