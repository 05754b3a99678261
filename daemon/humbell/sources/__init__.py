"""Where samples come from. A source delivers blocks; `Continuity` tells which of them join up."""

from humbell.sources.base import EndOfSource, Source
from humbell.sources.continuity import Continuation, Continuity, Join
from humbell.sources.counters import SourceCounters
from humbell.sources.hub import MqttHub
from humbell.sources.mqtt import MqttSettings, MqttSource
from humbell.sources.replay import Recording, ReplaySource
from humbell.sources.scale import Sensitivity, gain
from humbell.sources.settings import ReplaySettings

__all__ = [
    "Continuation",
    "Continuity",
    "EndOfSource",
    "Join",
    "MqttHub",
    "MqttSettings",
    "MqttSource",
    "Recording",
    "ReplaySettings",
    "ReplaySource",
    "Sensitivity",
    "Source",
    "SourceCounters",
    "gain",
]
