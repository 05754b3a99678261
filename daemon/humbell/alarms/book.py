"""The book of all alarms of a node: readings and commands in, transitions out."""

from collections.abc import Iterable, Mapping

from humbell.alarms.alarm import AlarmPlan, AlarmState, NameOccurrence, act, judge
from humbell.alarms.lifecycle import Event
from humbell.alarms.limit import Limit
from humbell.alarms.settings import LimitSettings
from humbell.model import AlarmId, AlarmType, Measure, PointId, Reading, Transition


def plan_alarms(point: PointId, measure: Measure, frame_s: float, settings: LimitSettings) -> tuple[AlarmPlan, ...]:
    """
    Return the alarms that *settings* ask for: `high` and `high_high` are two, each with its own life cycle.

    Args:
        point: whose measure is judged.

        measure: which.

        frame_s: seconds of signal in its readings.

        settings: the limits.
    """
    limits = ((AlarmType.HIGH, settings.high), (AlarmType.HIGH_HIGH, settings.high_high))
    return tuple(
        AlarmPlan(
            id=AlarmId(point.machine, point.point, measure, kind),
            limit=_limit(on, settings, settings.on_delay_s, settings.off_delay_s),
            piece_limit=_limit(on, settings, settings.on_pieces, settings.off_pieces),
            piece_age_s=settings.piece_age_s,
            frame_s=frame_s,
        )
        for kind, on in limits
        if on is not None
    )


class Book:
    """
    Keeps the state of every alarm.

    Args:
        plans: all alarms.

        name_occurrence: makes the id of an occurrence from the alarm and the time that raised it.

        states: read back after a restart; alarms not among them begin as unknown.
    """

    def __init__(
        self,
        plans: Iterable[AlarmPlan],
        name_occurrence: NameOccurrence,
        states: Mapping[AlarmId, AlarmState] | None = None,
    ) -> None:
        self._name_occurrence = name_occurrence
        self._plans: dict[AlarmId, AlarmPlan] = {plan.id: plan for plan in plans}
        self._states = {name: (states or {}).get(name, AlarmState()) for name in self._plans}
        self._watching: dict[tuple[str, str, Measure], list[AlarmPlan]] = {}
        for plan in self._plans.values():
            key = (plan.id.machine, plan.id.point, plan.id.measure)
            self._watching.setdefault(key, []).append(plan)

    @property
    def states(self) -> Mapping[AlarmId, AlarmState]:
        """The state of every alarm."""
        return self._states

    def feed(self, reading: Reading) -> list[Transition]:
        """Return the transitions that *reading* brings; readings of one point come in order of time."""
        transitions = []
        for plan in self._watching.get((reading.machine, reading.point, reading.measure), ()):
            state, transition = judge(self._states[plan.id], reading, plan, self._name_occurrence)
            self._states[plan.id] = state
            if transition:
                transitions.append(transition)
        return transitions

    def act(self, alarm: AlarmId, event: Event, time_ns: int) -> Transition | None:
        """
        Return the transition that a person's acknowledgement or reset brings, if any.

        Raises:
            KeyError: there is no such alarm.
        """
        state, transition = act(self._states[alarm], event, self._plans[alarm], time_ns)
        self._states[alarm] = state
        return transition


def _limit(on: float, settings: LimitSettings, on_need: float, off_need: float) -> Limit:
    return Limit(on=on, off=on - settings.deadband_in_force, on_need=on_need, off_need=off_need)
