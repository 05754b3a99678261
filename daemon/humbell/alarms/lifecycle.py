"""
The life cycle of an alarm as a table: what each event makes of each state.

States A to F and their transitions as in IEC 62682 and ISA-18.2 (state diagram; OPC 10000-9 tells the same); re-alarm
out of the latched states from memory of ISA-18.2-2016.
"""

from enum import StrEnum

from humbell.model import LifeCycle


class Event(StrEnum):
    """What may happen to an alarm."""

    RAISE = "raise"
    RETURN = "return"
    ACKNOWLEDGE = "acknowledge"
    RESET = "reset"


_A = LifeCycle.NORMAL
_B = LifeCycle.UNACKNOWLEDGED
_C = LifeCycle.ACKNOWLEDGED
_D = LifeCycle.RETURNED_UNACKNOWLEDGED
_E = LifeCycle.LATCHED_UNACKNOWLEDGED
_F = LifeCycle.LATCHED_ACKNOWLEDGED

# (state, event): state of an alarm that does not latch, state of one that does.
TABLE: dict[tuple[LifeCycle, Event], tuple[LifeCycle, LifeCycle]] = {
    (_A, Event.RAISE): (_B, _B),
    (_B, Event.ACKNOWLEDGE): (_C, _C),
    (_B, Event.RETURN): (_D, _E),
    (_C, Event.RETURN): (_A, _F),
    (_D, Event.ACKNOWLEDGE): (_A, _A),
    (_D, Event.RAISE): (_B, _B),
    (_E, Event.ACKNOWLEDGE): (_F, _F),
    (_E, Event.RAISE): (_B, _B),
    (_F, Event.RESET): (_A, _A),
    (_F, Event.RAISE): (_B, _B),
}


def follow(state: LifeCycle, event: Event, *, latching: bool = False) -> LifeCycle:
    """Return the state after *event*; an event that means nothing in a state leaves it as it is."""
    return TABLE.get((state, event), (state, state))[latching]


def in_alarm(state: LifeCycle) -> bool:
    """Return whether the alarm condition is there (B, C)."""
    return state in {_B, _C}
