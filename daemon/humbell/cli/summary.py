"""A replay told in a page of text."""

import math
from collections import defaultdict
from collections.abc import Mapping, Sequence

import numpy as np

from humbell.alarms import in_alarm
from humbell.app.jsonlines import utc_text
from humbell.app.wiring import JUDGED, bands_of, plan_all_alarms, points_of
from humbell.config import Site
from humbell.model import UNITS, AlarmId, Coverage, Measure, PointId, Quality, Reading, Transition, Unit
from humbell.sources import Recording

# Every amplitude is told with what it is.
_KIND = {
    Measure.VELOCITY_RMS: "RMS",
    Measure.ACCELERATION_RMS: "RMS",
    Measure.ACCELERATION_PEAK: "peak",
    Measure.CREST_FACTOR: "",
}


class Summary:
    """
    Collects what a replay tells.

    Args:
        site: what is played.
    """

    def __init__(self, site: Site) -> None:
        self._site = site
        self._values: dict[tuple[PointId, Measure], list[float]] = defaultdict(list)
        self._causes: dict[PointId, dict[str, int]] = defaultdict(lambda: defaultdict(int))
        self._transitions: list[Transition] = []
        # Nothing is known of an alarm until a good value says so.
        self._verified = {plan.id: (False, 0) for plan in plan_all_alarms(site)}

    def feed(self, told: Reading | Transition) -> None:
        """Take one reading or transition."""
        if isinstance(told, Transition):
            self._verified[told.alarm] = (told.verified, told.time_ns)
            if told.before is not told.after:
                self._transitions.append(told)
            return
        name = PointId(told.machine, told.point)
        if told.quality is not Quality.BAD:
            self._values[name, told.measure].append(told.value)
        if told.cause is not None and told.measure in JUDGED.values():
            self._causes[name][f"{told.measure} {told.quality}: {told.cause}"] += 1

    def text(self, recordings: Sequence[Recording], coverage: Mapping[PointId, Mapping[Coverage, float]]) -> str:
        """Return the page."""
        lines = [_recording(recording) for recording in recordings]
        for name, point in points_of(self._site):
            lines += ["", str(name), _seconds(coverage.get(name, {}))]
            for measure, unit in _measures_of(name, self._values):
                lines.append(_statistics(measure, unit, self._values[name, measure]))
            lines += [f"  {count} times {cause}" for cause, count in sorted(self._causes[name].items())]
            if not any(settings.high or settings.high_high for _, settings in bands_of(point)):
                lines.append("  not judged: no limits")
        lines += ["", *self._alarms()]
        return "\n".join(lines)

    def _alarms(self) -> list[str]:
        unknown = [_unknown(alarm, since_ns) for alarm, (verified, since_ns) in self._verified.items() if not verified]
        lines = ["Not known at the end, for want of good values:", *unknown, ""] if unknown else []
        if not self._transitions:
            return [*lines, "No alarm was raised."]
        last = {transition.alarm: transition.after for transition in self._transitions}
        count = sum(in_alarm(state) for state in last.values())
        return [*lines, f"Alarms: {count} standing at the end", *map(_transition, self._transitions)]


def _recording(recording: Recording) -> str:
    length = f"{recording.seconds:.4g} s"
    if recording.pieces:
        length = f"{recording.pieces} pieces of {recording.length / recording.rate_hz:.4g} s"
    return (
        f"{recording.path}: {recording.channels} channel(s), {recording.rate_hz:g} Hz, {recording.unit}, {length}"
        f" from {utc_text(recording.start_ns)}"
    )


def _measures_of(name: PointId, values: Mapping[tuple[PointId, Measure], list[float]]) -> list[tuple[Measure, Unit]]:
    return [(measure, UNITS[measure]) for measure in Measure if values.get((name, measure))]


def _statistics(measure: Measure, unit: Unit, values: list[float]) -> str:
    finite = np.array([value for value in values if math.isfinite(value)])
    low, middle, high = (f"{value:.4g}" for value in np.quantile(finite, [0, 0.5, 1]))
    what = " ".join(part for part in (unit if unit is not Unit.ONE else "", _KIND[measure]) if part)
    return f"  {measure:<18} {low:>8} … {middle:>8} … {high:>8} {what:<9} (least, median, greatest of {finite.size})"


def _seconds(seconds: Mapping[Coverage, float]) -> str:
    return "  " + (", ".join(f"{category} {value:.4g} s" for category, value in seconds.items()) or "nothing measured")


def _unknown(alarm: AlarmId, since_ns: int) -> str:
    since = f"since {utc_text(since_ns)}" if since_ns else "from the beginning"
    return f"  {alarm.machine}/{alarm.point} {alarm.name}, {since}"


def _transition(transition: Transition) -> str:
    alarm = transition.alarm
    value = "no value" if math.isnan(transition.value) else f"{transition.value:.4g}"
    return (
        f"  {utc_text(transition.time_ns)}  {alarm.machine}/{alarm.point} {alarm.name}: {transition.before} -> "
        f"{transition.after} at {value} {UNITS[alarm.measure]} (limit {transition.limit:g})"
    )
