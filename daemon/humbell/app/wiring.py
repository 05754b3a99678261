"""From the configuration to what each stage is to do."""

import hashlib
import uuid
from collections.abc import Callable, Iterator

from humbell.alarms import AlarmPlan, NameOccurrence, plan_alarms
from humbell.config import Acceleration, Point, Site, Velocity
from humbell.measures import BandPlan, PointPlan, Quantity
from humbell.model import AlarmId, ConfigError, Measure, PointId, SampleUnit
from humbell.sources import gain

# The measure of each band that its limits judge.
JUDGED = {Quantity.VELOCITY: Measure.VELOCITY_RMS, Quantity.ACCELERATION: Measure.ACCELERATION_RMS}


def points_of(site: Site) -> Iterator[tuple[PointId, Point]]:
    """Return all points, machine by machine, in the order of the configuration."""
    for machine, settings in site.machines.items():
        for point, chosen in settings.points.items():
            yield PointId(machine, point), chosen


def bands_of(point: Point) -> Iterator[tuple[Quantity, Velocity | Acceleration]]:
    """Return the bands that are measured at *point*."""
    if point.velocity is not None:
        yield Quantity.VELOCITY, point.velocity
    if point.acceleration is not None:
        yield Quantity.ACCELERATION, point.acceleration


def plan_points(site: Site, source: str, unit: SampleUnit, channels: int) -> list[PointPlan]:
    """
    Return what to measure on one source.

    Args:
        site: the configuration.

        source: id of the source.

        unit: of its samples.

        channels: that it delivers.

    Raises:
        ConfigError: a point asks for a channel that is not there, or lacks a sensitivity.
    """
    plans, problems = [], []
    for name, point in points_of(site):
        if point.channel.source != source:
            continue
        where = f"machines.{name.machine}.points.{name.point}"
        if point.channel.index >= channels:
            last = f"{source}/{channels - 1}"
            problems.append(
                f"{where}.channel: {point.channel} does not exist: {source} delivers {channels} channels"
                f" (give {source}/0 to {last})"
            )
            continue
        try:
            factor = gain(unit, point.sensitivity)
        except ValueError as error:
            problems.append(f"{where}.sensitivity: {error}")
            continue
        bands = tuple(
            BandPlan(settings.band(quantity), settings.frame_in_force_s) for quantity, settings in bands_of(point)
        )
        plans.append(PointPlan(name, point.channel.index, factor, bands))
    if problems:
        raise ConfigError(*problems)
    return plans


def plan_all_alarms(site: Site) -> list[AlarmPlan]:
    """Return every alarm of the node."""
    return [
        plan
        for name, point in points_of(site)
        for quantity, settings in bands_of(point)
        for plan in plan_alarms(name, JUDGED[quantity], settings.frame_in_force_s, settings)
    ]


def occurrence_names(site: Site, node: str) -> NameOccurrence:
    """Return what names occurrences: the same alarm raised at the same time on the same node has the same id."""

    def name(alarm: AlarmId, time_ns: int) -> str:
        text = f"{site.site}/{node}/{alarm.machine}/{alarm.point}/{alarm.name}/{time_ns}"
        return str(uuid.uuid5(uuid.NAMESPACE_OID, text))

    return name


def node_id(site: Site, read_serial: Callable[[], str]) -> str:
    """Return the configured id of this node, else one made from the computer's serial number."""
    if site.node is not None:
        return site.node
    return "node-" + hashlib.sha256(b"humbell" + read_serial().encode()).hexdigest()[:8]
