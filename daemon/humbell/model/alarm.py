"""Alarms as they are told and stored: their life-cycle state and its transitions."""

from dataclasses import dataclass
from enum import StrEnum

from humbell.model.reading import Measure


class LifeCycle(StrEnum):
    """States A to F of IEC 62682:2014 / ISA-18.2-2016 (clause numbers not to hand)."""

    NORMAL = "normal"  # A
    UNACKNOWLEDGED = "unacknowledged"  # B
    ACKNOWLEDGED = "acknowledged"  # C
    RETURNED_UNACKNOWLEDGED = "returned_unacknowledged"  # D
    LATCHED_UNACKNOWLEDGED = "latched_unacknowledged"  # E
    LATCHED_ACKNOWLEDGED = "latched_acknowledged"  # F


class AlarmType(StrEnum):
    """The alarm types of IEC 62682 that Humbell knows."""

    HIGH = "high"
    HIGH_HIGH = "high_high"


@dataclass(frozen=True, slots=True, order=True)
class AlarmId:
    """
    Names one alarm: one limit of one measure of one point.

    Args:
        machine: id of the machine.

        point: id of the point on it.

        measure: the quantity that is judged.

        type: which of its limits.
    """

    machine: str
    point: str
    measure: Measure
    type: AlarmType

    @property
    def name(self) -> str:
        """The alarm's name on its point, such as ``velocity_rms.high``."""
        return f"{self.measure}.{self.type}"


@dataclass(frozen=True, slots=True)
class Transition:
    """
    One change of an alarm's state, told at once and stored for ever.

    Args:
        time_ns: UTC of the end of the frame that brought it, ns since 1970.

        alarm: whose.

        before: life-cycle state until then.

        after: life-cycle state from then on.

        verified: whether values of good quality stand behind *after*. A transition in which *before* and *after*
            are the same tells that this has changed.

        value: that brought it, in the unit of the measure; NaN where lost data did.

        limit: the limit in force, same unit.

        occurrence: id of the occurrence; None where there is none (a normal alarm).
    """

    time_ns: int
    alarm: AlarmId
    before: LifeCycle
    after: LifeCycle
    verified: bool
    value: float
    limit: float
    occurrence: str | None
