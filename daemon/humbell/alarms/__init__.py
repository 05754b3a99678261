"""Limits with hysteresis and delays, and the life cycle of the alarms that they raise."""

from humbell.alarms.alarm import UNVERIFIED_FRAMES, AlarmPlan, AlarmState, NameOccurrence, act, judge
from humbell.alarms.book import Book, plan_alarms
from humbell.alarms.lifecycle import TABLE, Event, follow, in_alarm
from humbell.alarms.limit import Limit, LimitState, interrupted, step
from humbell.alarms.settings import DEADBAND_SHARE, LimitSettings

__all__ = [
    "DEADBAND_SHARE",
    "TABLE",
    "UNVERIFIED_FRAMES",
    "AlarmPlan",
    "AlarmState",
    "Book",
    "Event",
    "Limit",
    "LimitSettings",
    "LimitState",
    "NameOccurrence",
    "act",
    "follow",
    "in_alarm",
    "interrupted",
    "judge",
    "plan_alarms",
    "step",
]
