"""Sources of third parties: found through the entry point group `humbell.sources`, trusted no further than that."""

from collections.abc import Callable
from functools import cache, reduce
from importlib.metadata import entry_points
from operator import or_
from typing import TYPE_CHECKING, Annotated, Any, Protocol

from pydantic import BaseModel, Field

from humbell.sources import MqttSettings, ReplaySettings, Source

GROUP = "humbell.sources"


class Plugin(Protocol):
    """
    What an entry point of the group has to be.

    `settings` is a pydantic model with ``kind: Literal["..."]``, which no other source uses.
    """

    @property
    def settings(self) -> type[BaseModel]:
        """The settings of one source, as they stand under `sources:`."""
        ...

    def create(
        self,
        name: str,
        settings: Any,  # noqa: ANN401 - an instance of the plug-in's own `settings`
        monotonic: Callable[[], float],
        utc_ns: Callable[[], int],
    ) -> Source:
        """
        Make a source, without opening it.

        Args:
            name: its id.

            settings: an instance of `settings`.

            monotonic: seconds of a clock that nobody sets.

            utc_ns: ns since 1970.
        """
        ...


@cache
def plugins() -> tuple[dict[str, Plugin], dict[str, str]]:
    """
    Return the plug-ins by kind, and what is wrong with those that cannot be used, by entry point.

    A broken plug-in must not keep a node from starting: sources of its kind are unknown, and `humbell check` says why.
    """
    found: dict[str, Plugin] = {}
    broken: dict[str, str] = {}
    for point in sorted(entry_points(group=GROUP), key=lambda entry: entry.name):
        where = f"{point.name} ({point.value})"
        try:
            plugin: Plugin = point.load()
            (kind,) = plugin.settings.model_fields["kind"].annotation.__args__  # type: ignore[union-attr]  # a Literal has them
        except Exception as error:  # noqa: BLE001 - somebody else's code: whatever it raises, we go on
            broken[where] = f"{type(error).__name__}: {error}"
            continue
        if kind in found or kind in BUILT_IN:
            broken[where] = f"kind {kind!r} is taken already"
            continue
        found[kind] = plugin
    return found, broken


BUILT_IN: dict[str, type[BaseModel]] = {"replay": ReplaySettings, "mqtt": MqttSettings}

if TYPE_CHECKING:
    SourceSettings = Any
else:
    _kinds = (*BUILT_IN.values(), *(plugin.settings for plugin in plugins()[0].values()))
    SourceSettings = reduce(or_, _kinds)
    if len(_kinds) > 1:
        SourceSettings = Annotated[SourceSettings, Field(discriminator="kind")]
