"""What a person or program asks of the running service."""

from dataclasses import dataclass
from enum import StrEnum


class Action(StrEnum):
    """What may be asked for."""

    ACKNOWLEDGE = "acknowledge"


@dataclass(frozen=True, slots=True)
class Command:
    """
    One request, as it is checked, written to the journal, and only then done.

    Args:
        action: what.

        machine: id of the machine.

        point: id of the point on it.

        alarm: name of the alarm, such as ``velocity_rms.high``.

        who: the user, as the place where it comes from knows him.

        origin: where it comes from, such as ``command line``.

        note: why.
    """

    action: Action
    machine: str
    point: str
    alarm: str
    who: str
    origin: str
    note: str = ""

    @property
    def target(self) -> str:
        """What it is about, as the audit has it."""
        return f"{self.machine}/{self.point} {self.alarm}"
