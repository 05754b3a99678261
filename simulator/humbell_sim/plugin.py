"""The simulator as a source plug-in: `kind: tarnholm`, found through the entry point group `humbell.sources`."""

import threading
from collections.abc import Callable
from dataclasses import dataclass

from humbell.model import Block, EndOfSource
from humbell_sim.blocks import Blocks
from humbell_sim.settings import TarnholmSettings

# A wait may end a moment early; asking for another one of microseconds would help nobody.
_EARLY_S = 0.001


@dataclass(frozen=True, slots=True)
class _Run:
    blocks: Blocks
    began_s: float
    closed: threading.Event


class TarnholmSource:
    """
    Delivers blocks when a converter would have them complete.

    What was not read in time is delivered as soon as it is asked for: no sample is skipped, and no delay adds up.
    Opened again, it begins the story again, under another boot id.

    Args:
        name: the source's id.

        settings: what to play, and how fast.

        monotonic: seconds of a clock that nobody sets.

        utc_ns: ns since 1970.

        make_event: makes what reading waits on; a test's own goes with its clock.
    """

    def __init__(
        self,
        name: str,
        settings: TarnholmSettings,
        monotonic: Callable[[], float],
        utc_ns: Callable[[], int],
        make_event: Callable[[], threading.Event] = threading.Event,
    ) -> None:
        self._name = name
        self._settings = settings
        self._monotonic = monotonic
        self._utc_ns = utc_ns
        self._make_event = make_event
        self._run: _Run | None = None

    @property
    def name(self) -> str:
        """The source's id."""
        return self._name

    def open(self) -> None:
        """Begin: the first sample is of now."""
        self.close()
        blocks = Blocks(self._name, self._settings, self._utc_ns())
        self._run = _Run(blocks, self._monotonic(), self._make_event())

    def read(self, timeout_s: float) -> Block | None:
        """
        Return the next block, or None where it is not due within *timeout_s*, or the source was closed meanwhile.

        Raises:
            EndOfSource: the seconds asked for have been played.

            RuntimeError: the source is not open.
        """
        run = self._run
        if run is None:
            raise RuntimeError(f"source {self._name} is not open")
        if run.blocks.finished:
            raise EndOfSource
        due_s = run.began_s + run.blocks.due_s
        wait_s = due_s - self._monotonic()
        if wait_s > 0 and run.closed.wait(min(wait_s, max(timeout_s, 0.0))):
            return None
        if self._monotonic() < due_s - _EARLY_S:
            return None
        return run.blocks.take()

    def close(self) -> None:
        """Stop; a read that waits in another thread ends at once. May be called twice."""
        run, self._run = self._run, None
        if run is not None:
            run.closed.set()


class _Plugin:
    """What the entry point names."""

    settings = TarnholmSettings

    def create(
        self,
        name: str,
        settings: TarnholmSettings,
        monotonic: Callable[[], float],
        utc_ns: Callable[[], int],
    ) -> TarnholmSource:
        """
        Return a new source.

        Args:
            name: its id.

            settings: as they stand in the configuration.

            monotonic: seconds of a clock that nobody sets.

            utc_ns: ns since 1970.
        """
        return TarnholmSource(name, settings, monotonic, utc_ns)


plugin = _Plugin()
