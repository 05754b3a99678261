"""One alarm and readings for it, as the tests of this folder tell its life."""

import dataclasses
import json
import math
from typing import Any

from humbell.alarms import AlarmPlan, AlarmState, Limit, LimitState, judge
from humbell.model import AlarmId, AlarmType, Cause, LifeCycle, Measure, Quality, Reading, Transition

SECOND_NS = 1_000_000_000
ALARM = AlarmId("p-101", "de-h", Measure.VELOCITY_RMS, AlarmType.HIGH)

# Three seconds at 4.5 or above raise, five below 4.2 let it return; of pieces, two and three, at most an hour apart.
PLAN = AlarmPlan(
    id=ALARM,
    limit=Limit(on=4.5, off=4.2, on_need=3.0, off_need=5.0),
    piece_limit=Limit(on=4.5, off=4.2, on_need=2.0, off_need=3.0),
    piece_age_s=3600.0,
    frame_s=1.0,
)


def name(alarm: AlarmId, time_ns: int) -> str:
    """Name an occurrence after the alarm and the second that raised it."""
    return f"{alarm.name}@{time_ns / SECOND_NS:g}"


def good(value: float, span_s: float = 1.0) -> Reading:
    """Return a good value; its time is set when it is lived."""
    return Reading(0, ALARM.machine, ALARM.point, ALARM.measure, value, span_s, Quality.GOOD)


def doubtful(cause: Cause, value: float = math.nan, span_s: float = 1.0) -> Reading:
    """Return a value that is not good: uncertain where there is a number, else bad."""
    quality = Quality.BAD if math.isnan(value) else Quality.UNCERTAIN
    return Reading(0, ALARM.machine, ALARM.point, ALARM.measure, value, span_s, quality, cause)


def lost(span_s: float = 1.0) -> Reading:
    """Return lost signal."""
    return doubtful(Cause.NO_SAMPLES, span_s=span_s)


def piece(reading: Reading) -> Reading:
    """Return *reading* as that of a separate record."""
    return dataclasses.replace(reading, piece=True)


def again(state: AlarmState) -> AlarmState:
    """Return *state* as a restart finds it: written as JSON, and read back."""
    kept: dict[str, Any] = json.loads(json.dumps(dataclasses.asdict(state)))
    kept["life_cycle"] = LifeCycle(kept["life_cycle"])
    kept["limit"] = LimitState(**kept["limit"])
    return AlarmState(**kept)


class Life:
    """
    One alarm, its state, and all that it told.

    Args:
        plan: what it judges by.

        restarts: whether it is stopped and started again before each reading.
    """

    def __init__(self, plan: AlarmPlan = PLAN, *, restarts: bool = False) -> None:
        self.plan = plan
        self.state = AlarmState()
        self.told: list[Transition] = []
        self.now_ns = 0
        self._restarts = restarts

    def live(self, *readings: Reading, every_s: float | None = None) -> list[Transition]:
        """
        Live on, and return what is told.

        Args:
            readings: one behind the other.

            every_s: seconds from one to the next; None: as long as each one is.
        """
        told = []
        for reading in readings:
            self.now_ns += round((reading.span_s if every_s is None else every_s) * SECOND_NS)
            before = again(self.state) if self._restarts else self.state
            self.state, transition = judge(before, dataclasses.replace(reading, time_ns=self.now_ns), self.plan, name)
            told += [transition] if transition else []
        self.told += told
        return told


def raised(plan: AlarmPlan = PLAN) -> Life:
    """Return a life that has just come to its alarm, verified, at second 3."""
    life = Life(plan)
    life.live(good(5.0, 3.0))
    assert life.state.life_cycle is LifeCycle.UNACKNOWLEDGED
    return life
