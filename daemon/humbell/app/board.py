"""What is true now, held in memory for whoever asks: the last reading of every measure, the state of every alarm."""

import threading
import time
from collections.abc import Mapping
from dataclasses import dataclass

from humbell.alarms import AlarmState
from humbell.model import AlarmId, Measure, PointId, Reading


@dataclass(frozen=True, slots=True)
class Last:
    """
    The last reading of a measure.

    Args:
        reading: what it says.

        seen_ns: when it was made, on the monotonic clock.
    """

    reading: Reading
    seen_ns: int

    @property
    def age_s(self) -> float:
        """Seconds since it was made."""
        return (time.monotonic_ns() - self.seen_ns) / 1e9


class Board:
    """Filled by the measures' task, read by any other."""

    def __init__(self) -> None:
        self._lock = threading.Lock()
        self._readings: dict[tuple[PointId, Measure], Last] = {}
        self._states: Mapping[AlarmId, AlarmState] = {}

    def show(self, readings: tuple[Reading, ...], states: Mapping[AlarmId, AlarmState]) -> None:
        """Replace what the *readings* and *states* are newer than."""
        now_ns = time.monotonic_ns()
        with self._lock:
            for reading in readings:
                self._readings[PointId(reading.machine, reading.point), reading.measure] = Last(reading, now_ns)
            self._states = states

    @property
    def readings(self) -> dict[tuple[PointId, Measure], Last]:
        """The last reading of every measure that has had one."""
        with self._lock:
            return dict(self._readings)

    @property
    def states(self) -> Mapping[AlarmId, AlarmState]:
        """The state of every alarm."""
        with self._lock:
            return self._states
