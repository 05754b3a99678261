"""Reads the configuration file and composes the stages' own settings into one plan."""

from humbell.config.load import Loaded, load, parse
from humbell.config.plugins import Plugin, plugins
from humbell.config.site import Acceleration, Bearing, Machine, Point, Site, Speed, Velocity

__all__ = [
    "Acceleration",
    "Bearing",
    "Loaded",
    "Machine",
    "Plugin",
    "Point",
    "Site",
    "Speed",
    "Velocity",
    "load",
    "parse",
    "plugins",
]
