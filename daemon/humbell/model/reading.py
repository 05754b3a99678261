"""One value of one measure of one point."""

from dataclasses import dataclass
from enum import StrEnum

from humbell.model.quality import Cause, Quality
from humbell.model.units import Unit


class Measure(StrEnum):
    """The quantities computed for every frame."""

    VELOCITY_RMS = "velocity_rms"
    ACCELERATION_RMS = "acceleration_rms"
    ACCELERATION_PEAK = "acceleration_peak"
    CREST_FACTOR = "crest_factor"


UNITS: dict[Measure, Unit] = {
    Measure.VELOCITY_RMS: Unit.MILLIMETRES_PER_SECOND,
    Measure.ACCELERATION_RMS: Unit.G,
    Measure.ACCELERATION_PEAK: Unit.G,
    Measure.CREST_FACTOR: Unit.ONE,
}


@dataclass(frozen=True, slots=True)
class Reading:
    """
    One value of one measure of one point.

    Args:
        time_ns: UTC of the end of the frame, ns since 1970.

        machine: id of the machine.

        point: id of the point on it.

        measure: the quantity.

        value: in the unit of the measure (`UNITS`); NaN where there is no valid data.

        span_s: seconds of signal that the value stands for (for lost samples: that are missing).

        quality: how far to trust it.

        cause: why not; None exactly where the quality is good.

        detail: numbers or an advice that belong to *cause*.

        piece: the value comes from a separate short record, so it counts as one piece, not as seconds.
    """

    time_ns: int
    machine: str
    point: str
    measure: Measure
    value: float
    span_s: float
    quality: Quality
    cause: Cause | None = None
    detail: str | None = None
    piece: bool = False

    @property
    def unit(self) -> Unit:
        """Unit of the value."""
        return UNITS[self.measure]
