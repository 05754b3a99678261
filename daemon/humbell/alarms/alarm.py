"""One alarm: a limit, its life cycle, and whether good values stand behind what it says. A pure step."""

import math
from collections.abc import Callable
from dataclasses import dataclass, field, replace

from humbell.alarms.lifecycle import Event, follow
from humbell.alarms.limit import Limit, LimitState, interrupted, step
from humbell.model import MAY_RAISE, AlarmId, LifeCycle, Quality, Reading, Transition

# So many frames without a value that counts, and nobody knows any more.
UNVERIFIED_FRAMES = 3.0

# Makes the id of an occurrence from the alarm and the time (UTC ns) that raised it.
NameOccurrence = Callable[[AlarmId, int], str]


@dataclass(frozen=True, slots=True)
class AlarmPlan:
    """
    What one alarm judges by.

    Args:
        id: names it.

        limit: thresholds and delays for frames; seconds of signal.

        piece_limit: the same thresholds with delays in pieces.

        piece_age_s: a piece that comes later than this after the one before begins a new count.

        frame_s: seconds of signal in a frame.

        latching: whether it waits for a reset after the return.
    """

    id: AlarmId
    limit: Limit
    piece_limit: Limit
    piece_age_s: float
    frame_s: float
    latching: bool = False


@dataclass(frozen=True, slots=True)
class AlarmState:
    """
    Where one alarm stands. Unknown at first: nothing is healthy by default.

    Args:
        life_cycle: A to F.

        verified: values that count stand behind it.

        limit: where its limit stands.

        blind: frames, or pieces, since the last value that counted.

        occurrence: id of the last occurrence; None while it is normal.

        last_ns: end of the last reading, UTC ns since 1970; 0 before the first.
    """

    life_cycle: LifeCycle = LifeCycle.NORMAL
    verified: bool = False
    limit: LimitState = field(default_factory=LimitState)
    blind: float = 0.0
    occurrence: str | None = None
    last_ns: int = 0


def judge(
    state: AlarmState, reading: Reading, plan: AlarmPlan, name_occurrence: NameOccurrence
) -> tuple[AlarmState, Transition | None]:
    """
    Return the state after one more reading, and the transition that it brings, if any.

    A value without good quality never clears an alarm. One that is a lower bound may raise it.

    Args:
        state: from the last call, or read back after a restart.

        reading: of the alarm's measure, in order of time.

        plan: what it judges by.

        name_occurrence: names the occurrence, where one begins.
    """
    limit = plan.piece_limit if reading.piece else plan.limit
    span = 1.0 if reading.piece else reading.span_s
    before = state.limit
    if reading.piece and reading.time_ns - state.last_ns > plan.piece_age_s * 1e9:
        before = interrupted(before)

    good = reading.quality is Quality.GOOD
    # A lower bound tells something only where it reaches the limit.
    if good or (reading.cause in MAY_RAISE and reading.value >= limit.on):
        after = step(before, reading.value, span, limit, may_clear=good)
        blind, verified = 0.0, True
    else:
        blind = state.blind + (1.0 if reading.piece else reading.span_s / plan.frame_s)
        # One frame is bridged. More is unknown time, which may not count for either side.
        after = before if blind <= 1 else interrupted(before)
        verified = state.verified and blind < UNVERIFIED_FRAMES

    life_cycle = state.life_cycle
    occurrence = state.occurrence
    if after.up != before.up:
        life_cycle = follow(life_cycle, Event.RAISE if after.up else Event.RETURN, latching=plan.latching)
        if after.up:
            occurrence = name_occurrence(plan.id, reading.time_ns)
    changed = replace(
        state,
        life_cycle=life_cycle,
        verified=verified,
        limit=after,
        blind=blind,
        occurrence=None if life_cycle is LifeCycle.NORMAL else occurrence,
        last_ns=reading.time_ns,
    )
    return changed, _transition(state, changed, plan, (reading.time_ns, reading.value, occurrence))


def act(state: AlarmState, event: Event, plan: AlarmPlan, time_ns: int) -> tuple[AlarmState, Transition | None]:
    """
    Return the state after a person's `Event.ACKNOWLEDGE` or `Event.RESET`, and the transition that it brings, if any.

    Args:
        state: from the last call, or read back after a restart.

        event: what the person does.

        plan: what the alarm judges by.

        time_ns: when, UTC ns since 1970.
    """
    life_cycle = follow(state.life_cycle, event, latching=plan.latching)
    occurrence = None if life_cycle is LifeCycle.NORMAL else state.occurrence
    changed = replace(state, life_cycle=life_cycle, occurrence=occurrence)
    return changed, _transition(state, changed, plan, (time_ns, math.nan, state.occurrence))


def _transition(
    before: AlarmState, after: AlarmState, plan: AlarmPlan, what: tuple[int, float, str | None]
) -> Transition | None:
    if (before.life_cycle, before.verified) == (after.life_cycle, after.verified):
        return None
    time_ns, value, occurrence = what
    return Transition(
        time_ns=time_ns,
        alarm=plan.id,
        before=before.life_cycle,
        after=after.life_cycle,
        verified=after.verified,
        value=value,
        limit=plan.limit.on,
        occurrence=occurrence,
    )
