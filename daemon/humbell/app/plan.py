"""What a configuration comes to: what would be watched, how, and what would not."""

from collections.abc import Iterator
from dataclasses import dataclass

from humbell.app.wiring import JUDGED, bands_of, points_of
from humbell.config import Acceleration, Point, Site, Velocity
from humbell.measures import SAMPLES_PER_PERIOD, Quantity
from humbell.model import UNITS, Id, PointId

# Below this speed the band begins at 2 Hz (ISO 10816-3:2009; clause not to hand).
_SLOW_RPM = 600.0
_SLOW_LOWER_HZ = 2.0

CAUTIONS = (
    (
        "Humbell monitors. It is no machine protection system: it has no trip output and no safety integrity level, "
        "and claims conformity to no standard."
    ),
    "Limits taken from tables are general guidance. Local codes and a qualified vibration analyst decide.",
    (
        "Fit sensors only by the safety rules of the site: isolate and lock out, keep guards in place, mind hot "
        "surfaces, and keep cables clear of couplings and belts."
    ),
)


@dataclass(frozen=True, slots=True)
class BandLine:
    """
    One overall of one point.

    Args:
        quantity: velocity or acceleration.

        band_hz: lower and upper edge.

        frame_s: seconds of signal in one reading.

        unit: of the reading and its limits, with RMS.

        limits: by alarm, in *unit*.

        deadband: in *unit*; None where nothing is judged.

        on_delay_s: seconds at or above a limit until its alarm is raised.

        off_delay_s: seconds below limit - deadband until it returns.

        rate_needed_hz: the lowest rate that carries the band.
    """

    quantity: Quantity
    band_hz: tuple[float, float]
    frame_s: float
    unit: str
    limits: dict[str, float]
    deadband: float | None
    on_delay_s: float
    off_delay_s: float
    rate_needed_hz: float


@dataclass(frozen=True, slots=True)
class PointLine:
    """
    One point.

    Args:
        name: of the point.

        channel: its signal.

        rate_hz: of its source; None where only the files will tell.

        sensitivity: as it is understood, with calibration and serial number.

        mount: how the sensor is fitted; None where it is not said.

        bearing: events a turn of the shaft; empty where no bearing is given.

        bands: what is measured.
    """

    name: PointId
    channel: str
    rate_hz: float | None
    sensitivity: str
    mount: str | None
    bearing: dict[str, float]
    bands: tuple[BandLine, ...]


@dataclass(frozen=True, slots=True)
class Plan:
    """
    What would be watched and what not.

    Args:
        points: all points.

        not_watched: what no limit or measure covers, one sentence each.

        proposals: what to think about, one sentence each.
    """

    points: tuple[PointLine, ...]
    not_watched: tuple[str, ...]
    proposals: tuple[str, ...]

    @property
    def judged(self) -> int:
        """Number of overalls that a limit judges."""
        return sum(bool(band.limits) for point in self.points for band in point.bands)

    @property
    def measured(self) -> int:
        """Number of overalls that are measured."""
        return sum(len(point.bands) for point in self.points)


def plan(site: Site) -> Plan:
    """Return what *site* comes to."""
    return Plan(
        points=tuple(_point_line(site, name, point) for name, point in points_of(site)),
        not_watched=tuple(_not_watched(site)),
        proposals=tuple(_proposals(site)),
    )


def _point_line(site: Site, name: PointId, point: Point) -> PointLine:
    return PointLine(
        name=name,
        channel=str(point.channel),
        rate_hz=getattr(site.sources[point.channel.source], "rate_hz", None),
        sensitivity=_sensitivity(point),
        mount=point.mount,
        bearing=point.bearing.multiples if point.bearing else {},
        bands=tuple(_band_line(quantity, settings) for quantity, settings in bands_of(point)),
    )


def _band_line(quantity: Quantity, settings: Velocity | Acceleration) -> BandLine:
    limits = {"high": settings.high, "high_high": settings.high_high}
    given = {name: limit for name, limit in limits.items() if limit is not None}
    return BandLine(
        quantity=quantity,
        band_hz=settings.band_hz,
        frame_s=settings.frame_in_force_s,
        unit=f"{UNITS[JUDGED[quantity]]} RMS",
        limits=given,
        deadband=settings.deadband_in_force if given else None,
        on_delay_s=settings.on_delay_s,
        off_delay_s=settings.off_delay_s,
        rate_needed_hz=SAMPLES_PER_PERIOD * settings.band_hz[1],
    )


def _sensitivity(point: Point) -> str:
    chosen = point.sensitivity
    if chosen is None:
        return "none: blocks must carry g or m/s2"
    figures = (("mV/g", chosen.mV_per_g), ("mV/(m/s2)", chosen.mV_per_ms2), ("counts/g", chosen.counts_per_g))
    parts = [f"{value:g} {unit}" for unit, value in figures if value is not None]
    parts.append(f"calibrated {chosen.calibrated}" if chosen.calibrated else "day of calibration not given")
    if chosen.serial:
        parts.append(f"serial number {chosen.serial}")
    return ", ".join(parts)


def _not_watched(site: Site) -> Iterator[str]:
    for name, point in points_of(site):
        bands = dict(bands_of(point))
        for quantity in Quantity:
            if quantity not in bands:
                yield f"{name} {quantity}: switched off, not measured"
            elif bands[quantity].high is None and bands[quantity].high_high is None:
                yield f"{name} {quantity}: measured, but no limit judges it (give high)"
    for machine in site.machines:
        yield f"{machine}: its running state is unknown; limits judge it at standstill and run-up as well"
    used = {point.channel.source for _, point in points_of(site)}
    for source in site.sources:
        if source not in used:
            yield f"source {source}: no point has a channel of it"


def _proposals(site: Site) -> Iterator[str]:
    for machine, settings in site.machines.items():
        slow = settings.speed is not None and settings.speed.rpm < _SLOW_RPM
        for point, chosen in settings.points.items():
            velocity = chosen.velocity
            if slow and velocity is not None and velocity.band_hz[0] > _SLOW_LOWER_HZ:
                yield (
                    f"{machine}/{point} velocity: below {_SLOW_RPM:g} r/min the band begins at {_SLOW_LOWER_HZ:g} Hz: "
                    f"band_hz: [{_SLOW_LOWER_HZ:g}, {velocity.band_hz[1]:g}], which makes frames of 5 s"
                )
            yield from _mounting(machine, point, chosen)


def _mounting(machine: Id, point: Id, chosen: Point) -> Iterator[str]:
    if chosen.acceleration is None or chosen.mount == "stud":
        return
    upper = chosen.acceleration.band_hz[1]
    how = f"the mount is {chosen.mount}" if chosen.mount else "the mount is not given"
    yield (
        f"{machine}/{point} acceleration: {how}; up to {upper:g} Hz the mount's own resonance, which should lie above "
        "five times the highest frequency (ISO 5348), takes part: read it as a trend, not as an absolute value"
    )
