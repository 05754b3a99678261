"""`humbell check`."""

import json
from collections.abc import Iterator
from dataclasses import asdict
from pathlib import Path

from pydantic import BaseModel

from humbell.app.identity import read_serial
from humbell.app.plan import CAUTIONS, BandLine, Plan, PointLine, plan
from humbell.app.wiring import node_id
from humbell.config import Loaded, Machine, load, plugins


def run(config: Path, *, as_json: bool) -> None:
    """
    Print the plan that *config* comes to.

    Raises:
        ConfigError: it cannot be used.
    """
    loaded = load(config)
    found = plan(loaded.site)
    print(_json(loaded, found) if as_json else "\n".join(_text(loaded, found)))


def _json(loaded: Loaded, found: Plan) -> str:
    points = [
        asdict(point) | {"name": None, "machine": point.name.machine, "point": point.name.point}
        for point in found.points
    ]
    for point in points:
        del point["name"]
    return json.dumps(
        {
            "site": loaded.site.site,
            "node": node_id(loaded.site, read_serial),
            "configuration": {"path": str(loaded.path), "sha256": loaded.digest},
            "points": points,
            "not_watched": found.not_watched,
            "proposals": found.proposals,
            "cautions": CAUTIONS,
        },
        indent=2,
        ensure_ascii=False,
    )


def _text(loaded: Loaded, found: Plan) -> Iterator[str]:
    site = loaded.site
    yield f"{site.site}, node {node_id(site, read_serial)}"
    yield f"{loaded.path}, SHA-256 {loaded.digest[:16]}…"
    yield ""
    for name, settings in site.sources.items():
        yield _source(name, settings)
    yield from (f"source plug-in {where} cannot be used: {why}" for where, why in plugins()[1].items())
    points = iter(found.points)
    for machine, chosen in site.machines.items():
        yield ""
        yield _machine(machine, chosen)
        for _ in chosen.points:
            yield from _point(next(points))
    yield ""
    yield f"{len(found.points)} points; {found.judged} of {found.measured} overalls are judged by limits."
    yield from _section("Not watched:", found.not_watched)
    yield from _section("To think about:", found.proposals)
    yield from _section("Cautions:", CAUTIONS)


def _source(name: str, settings: BaseModel) -> str:
    said = settings.model_dump(mode="json", exclude_none=True)
    if said["kind"] == "replay":
        rate = f"{said['rate_hz']:g} Hz" if "rate_hz" in said else "rate from the file"
        unit = said.get("unit", "unit from the file")
        rail = f", full scale {said['full_scale']:g} {said.get('unit', '')}".rstrip() if "full_scale" in said else ""
        return f"source {name}: replay, {rate}, {unit}{rail}"
    return f"source {name}: {', '.join(str(v) if k == 'kind' else f'{k} {v}' for k, v in said.items())}"


def _machine(name: str, chosen: Machine) -> str:
    parts = [f"{name}: {chosen.name}" if chosen.name else name]
    parts.append(f"{chosen.speed.rpm:g} r/min ({chosen.speed.rpm / 60:.4g} Hz)" if chosen.speed else "speed not given")
    if chosen.group:
        parts.append(f"sister machines: {chosen.group}")
    return ", ".join(parts)


def _point(point: PointLine) -> Iterator[str]:
    rate = f" at {point.rate_hz:g} Hz" if point.rate_hz else ""
    yield f"  {point.name.point}: channel {point.channel}{rate}, mount {point.mount or 'not given'}"
    yield f"    sensitivity   {point.sensitivity}"
    for band in point.bands:
        yield from _band(band)
    if point.bearing:
        lines = ", ".join(f"{name.upper()} {value:.4g}" for name, value in point.bearing.items())
        yield f"    bearing       a turn of the shaft: {lines}"


def _band(band: BandLine) -> Iterator[str]:
    lower, upper = band.band_hz
    yield (
        f"    {band.quantity:<13} {lower:g} to {upper:g} Hz, a value every {band.frame_s:g} s,"
        f" needs {band.rate_needed_hz:g} Hz or more"
    )
    if band.limits:
        limits = ", ".join(f"{name} {limit:g}" for name, limit in band.limits.items())
        yield (
            f"{'':18}{limits} {band.unit}, deadband {band.deadband:g},"
            f" raised after {band.on_delay_s:g} s, returns after {band.off_delay_s:g} s"
        )


def _section(title: str, lines: tuple[str, ...]) -> Iterator[str]:
    if lines:
        yield ""
        yield title
        yield from (f"- {line}" for line in lines)
