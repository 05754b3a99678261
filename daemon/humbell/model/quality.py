"""How far a value can be trusted, and why not: quality, cause, and the coverage that follows from them."""

from dataclasses import dataclass
from enum import StrEnum


class Quality(StrEnum):
    """OPC UA's three words."""

    GOOD = "good"
    UNCERTAIN = "uncertain"
    BAD = "bad"


class Cause(StrEnum):
    """Why a value is not of good quality."""

    NO_SAMPLES = "no_samples"
    INCOMPLETE = "incomplete"
    NON_FINITE = "non_finite"
    FLAT = "flat"
    CLIPPED = "clipped"
    DC_STEP = "dc_step"
    SETTLING = "settling"
    SHORT_PIECE = "short_piece"
    DAEMON_DOWN = "daemon_down"


class Coverage(StrEnum):
    """
    What one second of one point was: exactly one of these, the first that applies.

    The order of the members is the order of precedence.
    """

    OUT_OF_SERVICE = "out_of_service"
    DAEMON_DOWN = "daemon_down"
    NO_SAMPLES = "no_samples"
    SENSOR_FAULT = "sensor_fault"
    SETTLING = "settling"
    NOT_RUNNING = "not_running"
    MEASURED = "measured"


@dataclass(frozen=True, slots=True)
class Verdict:
    """
    Quality and cause of one frame of one channel.

    Args:
        quality: as OPC UA has it.

        cause: None exactly where the quality is good.

        detail: numbers or an advice for the reader, where there are any.
    """

    quality: Quality
    cause: Cause | None = None
    detail: str | None = None


GOOD = Verdict(Quality.GOOD)

# A clipped or short record still shows at least that much vibration: such a value may raise an alarm, never clear it.
MAY_RAISE = frozenset({Cause.CLIPPED, Cause.SHORT_PIECE})

_COVERAGE = {
    Cause.DAEMON_DOWN: Coverage.DAEMON_DOWN,
    Cause.NO_SAMPLES: Coverage.NO_SAMPLES,
    Cause.INCOMPLETE: Coverage.NO_SAMPLES,
    Cause.NON_FINITE: Coverage.SENSOR_FAULT,
    Cause.FLAT: Coverage.SENSOR_FAULT,
    Cause.CLIPPED: Coverage.SENSOR_FAULT,
    Cause.DC_STEP: Coverage.SETTLING,
    Cause.SETTLING: Coverage.SETTLING,
}


def coverage_of(quality: Quality, cause: Cause | None) -> Coverage:
    """Return the coverage of the seconds that a value of this quality and cause stands for."""
    if cause is None or (cause is Cause.CLIPPED and quality is Quality.UNCERTAIN):
        return Coverage.MEASURED
    return _COVERAGE.get(cause, Coverage.MEASURED)
