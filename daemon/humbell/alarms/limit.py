"""One limit with deadband and delays, as a pure step. Knows nothing of life cycles or clocks."""

import math
from dataclasses import dataclass, replace


@dataclass(frozen=True, slots=True)
class Limit:
    """
    The thresholds of one alarm.

    Args:
        on: at or above this the value counts towards the alarm.

        off: below this it counts towards the return; on - deadband.

        on_need: so much counted, seconds of signal or pieces, raises.

        off_need: so much counted lets it return.
    """

    on: float
    off: float
    on_need: float
    off_need: float


@dataclass(frozen=True, slots=True)
class LimitState:
    """
    Where one limit stands.

    Args:
        up: the alarm condition is there.

        counted: seconds of signal, or pieces, that speak for the other side.
    """

    up: bool = False
    counted: float = 0.0


def step(state: LimitState, value: float, span: float, limit: Limit, *, may_clear: bool = True) -> LimitState:
    """
    Return the state after one more value.

    The on-delay runs at or above the limit, holds between limit - deadband and limit, and is reset below; the off-delay
    mirrors it.

    Args:
        state: from the last call, or read back after a restart.

        value: in the unit of *limit*. NaN (no valid data) changes nothing.

        span: seconds of signal that *value* stands for; for pieces 1.

        limit: the thresholds in force.

        may_clear: False for a lower bound of the true value, which may raise but neither clear nor reset.
    """
    if math.isnan(value):
        return state
    if state.up:
        return _while_up(state, value, span, limit, may_clear=may_clear)
    if value >= limit.on:
        # Seconds of signal, not of the clock: a gap, a restart or a clock step must not count as time above the limit.
        counted = state.counted + span
        return LimitState(up=True) if _enough(counted, limit.on_need) else LimitState(up=False, counted=counted)
    if value < limit.off and may_clear:
        return LimitState()
    return state


def interrupted(state: LimitState) -> LimitState:
    """Return the state after a gap too long to be bridged: what was counted is forgotten, the condition stays."""
    return replace(state, counted=0.0)


def _while_up(state: LimitState, value: float, span: float, limit: Limit, *, may_clear: bool) -> LimitState:
    if value >= limit.on:
        return LimitState(up=True)
    if value < limit.off and may_clear:
        counted = state.counted + span
        return LimitState() if _enough(counted, limit.off_need) else LimitState(up=True, counted=counted)
    return state


def _enough(counted: float, need: float) -> bool:
    # Frames of 0.1 s add up to 9.999... s.
    return counted >= need * (1 - 1e-9)
