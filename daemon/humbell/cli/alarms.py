"""`humbell alarms`."""

import math
from pathlib import Path
from typing import Any

from humbell.app.control import ask, socket_path
from humbell.app.jsonlines import transition_line, utc_text
from humbell.cli.ask import ask_or_none, print_json, read, user
from humbell.config import Loaded
from humbell.journal import open_for_reading, states, transitions
from humbell.model import Action, ConfigError, LifeCycle


def run(config: Path, *, as_json: bool) -> int:
    """
    Print every alarm that is not plainly normal; return 1 where one is, else 0.

    Raises:
        ConfigError: *config* cannot be used.

        JournalError: no service runs, and there is no journal to read.
    """
    loaded = read(config)
    answer = ask_or_none(loaded, {"ask": "alarms"})
    found: list[dict[str, Any]] = list(answer["alarms"]) if answer is not None else _from_journal(loaded)
    shown = [alarm for alarm in found if alarm["state"] != LifeCycle.NORMAL or not alarm["verified"]]
    if as_json:
        print_json(found)
    else:
        for alarm in shown:
            unverified = "" if alarm["verified"] else ", not verified"
            print(f"{alarm['machine']}/{alarm['point']} {alarm['alarm']}: {alarm['state']}{unverified}")
        print(f"{len(found)} alarms, {len(found) - len(shown)} of them normal and verified.")
    return 1 if any(alarm["state"] != LifeCycle.NORMAL for alarm in found) else 0


def history(config: Path, limit: int, *, as_json: bool) -> int:
    """
    Print the last transitions, oldest first, from the journal.

    Raises:
        ConfigError: *config* cannot be used.

        JournalError: there is no journal to read.
    """
    loaded = read(config)
    with open_for_reading(loaded.site.journal.path) as journal:
        for stored in transitions(journal, limit=limit):
            one = stored.transition
            if as_json:
                print(transition_line(one))
                continue
            value = "no value" if math.isnan(one.value) else f"{one.value:.4g}"
            change = f"{one.before} -> {one.after}" if one.before is not one.after else str(one.after)
            print(
                f"{utc_text(one.time_ns)}  {one.alarm.machine}/{one.alarm.point} {one.alarm.name}: {change},"
                f" {'verified' if one.verified else 'not verified'}, {value} (limit {one.limit:g})"
            )
    return 0


def acknowledge(config: Path, alarm: str, note: str, *, as_json: bool) -> int:
    """
    Acknowledge one alarm; return 0 where it was done, 1 where it was not.

    Raises:
        ConfigError: *config* or *alarm* cannot be used.

        OutOfReachError: no service runs.
    """
    loaded = read(config)
    machine, slash, rest = alarm.partition("/")
    point, second, name = rest.partition("/")
    if not (slash and second and machine and point and name):
        raise ConfigError(f"{alarm}: is no alarm (give MACHINE/POINT/ALARM, such as p-101/de-h/velocity_rms.high)")
    answer = ask(
        socket_path(loaded.site.journal.path),
        {
            "ask": "command",
            "action": Action.ACKNOWLEDGE,
            "machine": machine,
            "point": point,
            "alarm": name,
            "who": user(),
            "origin": "command line",
            "note": note,
        },
    )
    if as_json:
        print_json(answer)
    else:
        print(answer.get("text") or answer.get("error"))
    return 0 if answer.get("done") else 1


def _from_journal(loaded: Loaded) -> list[dict[str, Any]]:
    with open_for_reading(loaded.site.journal.path) as journal:
        return [
            {
                "machine": alarm.machine,
                "point": alarm.point,
                "alarm": alarm.name,
                "state": state.life_cycle,
                # Whatever stood behind it when the service ended, nobody looks now.
                "verified": False,
                "occurrence": state.occurrence,
            }
            for alarm, state in sorted(states(journal).items())
        ]
