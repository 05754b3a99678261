"""Readings, transitions and journals as the tests of this folder need them."""

import math
from collections.abc import Iterable
from pathlib import Path
from typing import Any

from humbell.alarms import AlarmState
from humbell.journal import Deed, Journal, JournalSettings, Watched
from humbell.model import AlarmId, AlarmType, Cause, LifeCycle, Measure, Moment, PointId, Quality, Reading, Transition

SECOND_NS = 1_000_000_000
HOUR_NS = 3600 * SECOND_NS
START_NS = 1_772_359_200 * SECOND_NS  # 2026-03-01T10:00:00Z, the begin of an hour
DE, NDE = PointId("p-101", "de-h"), PointId("p-101", "nde-h")
ALARM = AlarmId(DE.machine, DE.point, Measure.VELOCITY_RMS, AlarmType.HIGH)
DEED = Deed("mara", "command line", "acknowledge", "p-101/de-h velocity_rms.high", "seen", "done")
WATCHED = Watched(
    digest="d" * 64,
    content="site: tarnholm-water",
    counted={DE: Measure.VELOCITY_RMS, NDE: Measure.VELOCITY_RMS},
    judged={(DE, Measure.VELOCITY_RMS), (DE, Measure.ACCELERATION_RMS)},
    kept={Measure.VELOCITY_RMS, Measure.ACCELERATION_RMS},
)


class Clock:
    """Both clocks, which stand still until they are set."""

    def __init__(self) -> None:
        self.now = Moment("boot-1", 0, START_NS)

    def __call__(self) -> Moment:
        """Return the moment."""
        return self.now


def reading(second: float, value: float = 2.0, point: PointId = DE, **changes: Any) -> Reading:  # noqa: ANN401 - fields
    """Return a good velocity of one second that ends *second* after the beginning; other fields by name."""
    fields: dict[str, Any] = {"measure": Measure.VELOCITY_RMS, "span_s": 1.0, "quality": Quality.GOOD}
    return Reading(START_NS + round(second * SECOND_NS), point.machine, point.point, value=value, **fields | changes)


def lost(second: float, span_s: float = 1.0, cause: Cause = Cause.NO_SAMPLES, point: PointId = DE) -> Reading:
    """Return what stands for lost signal."""
    return reading(second, math.nan, point, span_s=span_s, quality=Quality.BAD, cause=cause)


def transition(number: int, alarm: AlarmId = ALARM) -> tuple[Transition, AlarmState]:
    """Return a transition that can be told from others by its *number*, with the state that it leads to."""
    name = f"{alarm.name}@{number}"
    told = Transition(
        time_ns=START_NS + number * SECOND_NS,
        alarm=alarm,
        before=LifeCycle.NORMAL,
        after=LifeCycle.UNACKNOWLEDGED,
        verified=True,
        value=4.5 + number,
        limit=4.5,
        occurrence=name,
    )
    return told, AlarmState(LifeCycle.UNACKNOWLEDGED, verified=True, occurrence=name, last_ns=told.time_ns)


def journal(folder: Path, watched: Watched = WATCHED, clock: Clock | None = None, **settings: Any) -> Journal:  # noqa: ANN401 - fields
    """Return the journal in *folder*, not opened yet."""
    return Journal(JournalSettings(path=folder / "journal.db", **settings), watched, clock or Clock())


def commit(journal: Journal, readings: Iterable[Reading]) -> int:
    """Commit *readings* and no alarm."""
    for one in readings:
        journal.add(one)
    return journal.commit({})
