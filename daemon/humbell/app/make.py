"""From the settings of the sources to the sources."""

import time

from humbell.config import Site, plugins
from humbell.model import ConfigError
from humbell.sources import ReplaySettings, Source


def make_sources(site: Site) -> list[Source]:
    """
    Return all live sources of *site*, not opened yet.

    Raises:
        ConfigError: there is none.
    """
    found, _ = plugins()
    sources: list[Source] = []
    for name, settings in site.sources.items():
        if isinstance(settings, ReplaySettings):
            continue  # plays files when it is asked to
        sources.append(found[settings.kind].create(name, settings, time.monotonic, time.time_ns))
    if not sources:
        raise ConfigError(
            "sources: none is live; humbell replay plays recordings (add one of another kind than replay)"
        )
    return sources
