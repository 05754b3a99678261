"""From the settings of the sources to the sources."""

import time

import structlog

from humbell.app.identity import read_serial
from humbell.app.wiring import node_id
from humbell.config import Site, plugins
from humbell.model import ConfigError
from humbell.sources import MqttHub, MqttSettings, MqttSource, ReplaySettings, Source

_log = structlog.get_logger()


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
            sources.append(found[settings.kind].create(name, settings, time.monotonic, time.time_ns))
    if not sources:
        raise ConfigError("sources: none is live, humbell replay plays recordings (add one of another kind)")
    return sources


def _note(event: str, /, **fields: object) -> None:
    _log.info(event, **fields)
