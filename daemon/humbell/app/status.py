"""What the running service tells of itself, as plain data for the socket."""

import math
import time
from collections.abc import Mapping
from dataclasses import asdict
from typing import Any

from humbell import __version__
from humbell.app.jsonlines import number, utc_text
from humbell.app.service import Service
from humbell.app.wiring import JUDGED, bands_of, points_of
from humbell.model import Action, AlarmId, Command, LifeCycle, PointId


def handle(service: Service, request: Mapping[str, Any]) -> Mapping[str, Any]:
    """
    Answer one request of the control socket.

    Raises:
        KeyError, ValueError: the request lacks something, or asks for something unknown.
    """
    match request["ask"]:
        case "status":
            return status(service)
        case "alarms":
            return {"alarms": alarms(service)}
        case "command":
            answer = service.submit(
                Command(
                    action=Action(request["action"]),
                    machine=str(request["machine"]),
                    point=str(request["point"]),
                    alarm=str(request["alarm"]),
                    who=str(request["who"]),
                    origin=str(request["origin"]),
                    note=str(request.get("note", "")),
                )
            )
            return asdict(answer)
        case unknown:
            raise ValueError(f"{unknown!r} is not known")


def status(service: Service) -> dict[str, Any]:
    """Return how all parts are doing."""
    tasks = [service.measuring.task, service.keeper.task, *(intake.task for intake in service.intakes)]
    return {
        "version": __version__,
        "site": service.loaded.site.site,
        "node": service.node,
        "configuration": service.loaded.digest,
        "up_s": (time.monotonic_ns() - service.started_ns) / 1e9,
        "sources": [_source(service, index) for index in range(len(service.intakes))],
        "points": [_point(service, name) for name, _ in points_of(service.loaded.site)],
        "queues": [asdict(service.blocks.state), asdict(service.keeper.queue.state)],
        "journal": asdict(service.keeper.state),
        "measured_blocks": service.measuring.measured_blocks,
        "tasks": [
            {"name": t.name, "alive": t.alive, "age_s": t.age_s, "errors": t.errors, "last_error": t.last_error}
            for t in tasks
        ],
    }


def alarms(service: Service) -> list[dict[str, Any]]:
    """Return every alarm with its state; what needs attention first."""
    found = sorted(service.board.states.items(), key=lambda item: (_urgency(item[1].life_cycle), item[0]))
    return [
        {
            "machine": alarm.machine,
            "point": alarm.point,
            "alarm": alarm.name,
            "state": state.life_cycle,
            "verified": state.verified,
            "occurrence": state.occurrence,
        }
        for alarm, state in found
    ]


def _urgency(life_cycle: LifeCycle) -> int:
    order = (LifeCycle.UNACKNOWLEDGED, LifeCycle.ACKNOWLEDGED, LifeCycle.RETURNED_UNACKNOWLEDGED)
    return order.index(life_cycle) if life_cycle in order else len(order) + (life_cycle is LifeCycle.NORMAL)


def _source(service: Service, index: int) -> dict[str, Any]:
    intake = service.intakes[index]
    state = intake.state
    line = service.chain.lines[intake.name]
    continuity = line.continuity
    dropped = {
        "duplicate": continuity.duplicate_blocks,
        "late": continuity.late_blocks + line.late_blocks,
        "unusable": service.measuring.unusable.get(intake.name, 0),
        "lost_before_us": continuity.lost_blocks,
    }
    found = asdict(state)
    found["trouble"] = state.trouble or service.measuring.troubles.get(intake.name, "")
    found["dropped_blocks"] = {reason: count for reason, count in dropped.items() if count}
    return found


def _point(service: Service, name: PointId) -> dict[str, Any]:
    point = service.loaded.site.machines[name.machine].points[name.point]
    readings = service.board.readings
    measures: dict[str, Any] = {}
    for quantity, _ in bands_of(point):
        last = readings.get((name, JUDGED[quantity]))
        if last is None:
            measures[JUDGED[quantity]] = None
            continue
        reading = last.reading
        measures[reading.measure] = {
            "value": number(reading.value) if math.isfinite(reading.value) else None,
            "unit": reading.unit,
            "quality": reading.quality,
            "cause": reading.cause,
            "time": utc_text(reading.time_ns),
            "age_s": last.age_s,
        }
    states = service.board.states
    standing = [
        {"alarm": alarm.name, "state": state.life_cycle, "verified": state.verified}
        for alarm, state in sorted(states.items())
        if _belongs(alarm, name) and (state.life_cycle is not LifeCycle.NORMAL or not state.verified)
    ]
    return {"machine": name.machine, "point": name.point, "measures": measures, "alarms": standing}


def _belongs(alarm: AlarmId, name: PointId) -> bool:
    return (alarm.machine, alarm.point) == (name.machine, name.point)
