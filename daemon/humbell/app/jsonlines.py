"""What the stages tell, as JSON objects; their form is part of the interface."""

import json
import math
from collections.abc import Mapping
from datetime import UTC, datetime

from humbell.model import Coverage, PointId, Reading, Transition


def utc_text(time_ns: int) -> str:
    """Return UTC ns since 1970 as ISO 8601, rounded to microseconds, without a fraction that is zero."""
    seconds, micros = divmod(round(time_ns / 1000), 1_000_000)
    text = datetime.fromtimestamp(seconds, UTC).strftime("%Y-%m-%dT%H:%M:%S")
    return text + (f".{micros:06d}".rstrip("0") if micros else "") + "Z"


def reading_line(reading: Reading) -> str:
    """Return *reading* as one line of JSON."""
    return _line(
        kind="reading",
        time=utc_text(reading.time_ns),
        machine=reading.machine,
        point=reading.point,
        measure=reading.measure,
        value=number(reading.value),
        unit=reading.unit,
        span_s=number(reading.span_s),
        quality=reading.quality,
        cause=reading.cause,
        detail=reading.detail,
    )


def transition_line(transition: Transition) -> str:
    """Return *transition* as one line of JSON."""
    return _line(
        kind="transition",
        time=utc_text(transition.time_ns),
        machine=transition.alarm.machine,
        point=transition.alarm.point,
        alarm=transition.alarm.name,
        **{"from": transition.before},
        to=transition.after,
        verified=transition.verified,
        value=number(transition.value),
        limit=number(transition.limit),
        occurrence=transition.occurrence,
    )


def coverage_line(point: PointId, seconds: Mapping[Coverage, float]) -> str:
    """Return the coverage of *point* as one line of JSON."""
    found = {str(category): number(value) for category, value in seconds.items()}
    return _line(kind="coverage", machine=point.machine, point=point.point, seconds=found)


def _line(**fields: object) -> str:
    return json.dumps(fields, ensure_ascii=False, allow_nan=False, separators=(",", ":"))


def number(value: float) -> float | None:
    """Return *value* as it is printed; None where there is none."""
    # Six digits are more than any sensor gives, and hide the last bits that depend on the processor.
    return float(f"{value:.6g}") if math.isfinite(value) else None
