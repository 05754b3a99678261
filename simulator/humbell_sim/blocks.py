"""Cuts the story into blocks, and says when each is due. Times come from counting samples, so nothing adds up."""

from humbell.model import Block, SampleUnit
from humbell_sim.settings import TarnholmSettings
from humbell_sim.tarnholm import renderer


class Blocks:
    """
    The blocks of one source, one after the other.

    Args:
        source: id of the source.

        settings: what to play.

        start_ns: UTC of the first sample, ns since 1970.
    """

    def __init__(self, source: str, settings: TarnholmSettings, start_ns: int) -> None:
        self.source = source
        self._settings = settings
        self._start_ns = start_ns
        self._boot = f"{settings.seed}-{start_ns}"
        self._renderer = renderer(settings.seed, settings.channels, settings.rate_hz)
        self._end = None if settings.seconds is None else max(1, round(settings.seconds * settings.rate_hz))
        self._seq = 0

    @property
    def endless(self) -> bool:
        """Whether there is always more."""
        return self._end is None

    @property
    def finished(self) -> bool:
        """Whether there is no more."""
        return self._end is not None and self._first >= self._end

    @property
    def due_s(self) -> float:
        """When the next block is complete, seconds after the first sample at the pace asked for; 0 flat out."""
        pace = self._settings.pace
        return (self._first + self._length) / self._settings.rate_hz / pace if pace else 0.0

    def take(self) -> Block:
        """Return the next block; its samples are float32 in g."""
        samples = self._renderer.render(self._first, self._length)
        # Stages share them.
        samples.flags.writeable = False
        block = Block(
            source=self.source,
            boot=self._boot,
            seq=self._seq,
            start_ns=self._start_ns + round(self._first * 1e9 / self._settings.rate_hz),
            rate_hz=self._settings.rate_hz,
            unit=SampleUnit.G,
            samples=samples,
        )
        self._seq += 1
        return block

    @property
    def _first(self) -> int:
        return self._seq * self._settings.block_length

    @property
    def _length(self) -> int:
        length = self._settings.block_length
        return length if self._end is None else min(length, self._end - self._first)
