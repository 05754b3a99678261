"""The words that all stages share. Imports nothing of ours."""

from humbell.model.alarm import AlarmId, AlarmType, LifeCycle, Transition
from humbell.model.block import Block, Samples
from humbell.model.command import Action, Command
from humbell.model.errors import ConfigError, EndOfSource, HumbellError, InputError, OutOfReachError
from humbell.model.ids import ChannelId, Id, PointId
from humbell.model.moment import Moment
from humbell.model.quality import GOOD, MAY_RAISE, Cause, Coverage, Quality, Verdict, coverage_of
from humbell.model.reading import UNITS, Measure, Reading
from humbell.model.secret import Secret
from humbell.model.units import STANDARD_GRAVITY, SampleUnit, Unit

__all__ = [
    "GOOD",
    "MAY_RAISE",
    "STANDARD_GRAVITY",
    "UNITS",
    "Action",
    "AlarmId",
    "AlarmType",
    "Block",
    "Cause",
    "ChannelId",
    "Command",
    "ConfigError",
    "Coverage",
    "EndOfSource",
    "HumbellError",
    "Id",
    "InputError",
    "LifeCycle",
    "Measure",
    "Moment",
    "OutOfReachError",
    "PointId",
    "Quality",
    "Reading",
    "SampleUnit",
    "Samples",
    "Secret",
    "Transition",
    "Unit",
    "Verdict",
    "coverage_of",
]
