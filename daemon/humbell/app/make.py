"""From the settings of the sources to the sources."""

import time
from collections.abc import Callable
from functools import partial

import structlog

from humbell.app.identity import read_serial
from humbell.app.wiring import node_id
from humbell.config import Site, plugins
from humbell.model import Block, ConfigError
from humbell.sources import MqttHub, MqttSettings, MqttSource, ReplaySettings, Source

_log = structlog.get_logger()


class Driven:
    """
    A source of somebody else's driver, made when it is opened: one that cannot be made keeps no other from running.

    Args:
        name: its id.

        create: makes the source; may raise whatever drivers raise, and is tried again.
    """

    def __init__(self, name: str, create: Callable[[], Source]) -> None:
        self._name = name
        self._create = create
        self._source: Source | None = None

    @property
    def name(self) -> str:
        """The source's id."""
        return self._name

    @property
    def counters(self) -> object:
        """What the driver counts; None where it does not."""
        return getattr(self._source, "counters", None)

    def open(self) -> None:
        """Make and open it; what the driver raises goes through."""
        if self._source is None:
            self._source = self._create()
        self._source.open()

    def read(self, timeout_s: float) -> Block | None:
        """
        Return its next block, or None; what the driver raises goes through.

        Raises:
            RuntimeError: it was never opened.
        """
        if self._source is None:
            raise RuntimeError(f"source {self._name} is not open")
        return self._source.read(timeout_s)

    def close(self) -> None:
        """Close it, if it was made."""
        if self._source is not None:
            self._source.close()


def make_sources(site: Site) -> list[Source]:
    """
    Return all live sources of *site*, not opened yet.

    Raises:
        ConfigError: there is none, or one names a broker that is not there.
    """
    # The session at the broker belongs to this node alone: two with one name would throw each other out.
    hub = MqttHub(site.brokers, f"humbell-{site.site}-{node_id(site, read_serial)}", note=_note)
    found, _ = plugins()
    sources: list[Source] = []
    for name, settings in site.sources.items():
        if isinstance(settings, MqttSettings):
            sources.append(MqttSource(name, settings, hub, note=_note))
        elif not isinstance(settings, ReplaySettings):  # which plays files when it is asked to
            create = partial(found[settings.kind].create, name, settings, time.monotonic, time.time_ns)
            sources.append(Driven(name, create))
    if not sources:
        raise ConfigError("sources: none is live, humbell replay plays recordings (add one of another kind)")
    return sources


def _note(event: str, /, **fields: object) -> None:
    _log.info(event, **fields)
