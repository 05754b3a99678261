"""`humbell status`."""

from collections import Counter
from collections.abc import Iterator, Mapping
from pathlib import Path
from typing import Any

from humbell.app.jsonlines import utc_text
from humbell.cli.ask import ask_or_none, print_json, read
from humbell.config import Loaded
from humbell.journal import last_seq, open_for_reading, states, totals
from humbell.model import LifeCycle


def run(config: Path, *, as_json: bool) -> int:
    """
    Print how the service is doing; return 0 where all is well, 1 where something is not, 3 where it does not run.

    Raises:
        ConfigError: *config* cannot be used.

        JournalError: no service runs, and there is no journal to read.
    """
    loaded = read(config)
    answer = ask_or_none(loaded, {"ask": "status"})
    if answer is None:
        left = _left_behind(loaded)
        print_json(left) if as_json else print("\n".join(f"{key}: {value}" for key, value in left.items()))
        return 3
    if as_json:
        print_json(answer)
    else:
        print("\n".join(_text(answer)))
    return 1 if any(_troubles(answer)) else 0


def _left_behind(loaded: Loaded) -> dict[str, Any]:
    with open_for_reading(loaded.site.journal.path) as journal:
        (end_ns,) = journal.execute("SELECT max(end_ns) FROM chunk").fetchone()
        found = states(journal)
        return {
            "running": False,
            "journal": str(loaded.site.journal.path),
            "last_reading": None if end_ns is None else utc_text(end_ns),
            "last_number": last_seq(journal),
            "alarms_not_normal": sum(state.life_cycle is not LifeCycle.NORMAL for state in found.values()),
            "points": len(totals(journal)),
        }


def _troubles(answer: Mapping[str, Any]) -> Iterator[str]:
    for source in answer["sources"]:
        if source["trouble"]:
            yield f"source {source['name']}: {source['trouble']}"
        elif source["state"] != "ended" and (source["age_s"] is None or source["age_s"] > 5):  # noqa: PLR2004 - seconds
            age = "none yet" if source["age_s"] is None else f"the last {source['age_s']:.0f} s ago"
            yield f"source {source['name']}: no blocks, {age} (look at the sender and its link)"
    if answer["journal"]["trouble"]:
        yield f"journal: {answer['journal']['trouble']}"
    if answer["journal"]["put_aside"]:
        yield f"journal: a damaged one was put aside as {answer['journal']['put_aside']} (keep it for the evidence)"
    for task in answer["tasks"]:
        if task["errors"]:
            yield f"task {task['name']}: failed {task['errors']} times, last: {task['last_error']} (see the log)"


def _text(answer: Mapping[str, Any]) -> Iterator[str]:
    yield f"{answer['site']}, node {answer['node']}: running for {answer['up_s']:.0f} s, version {answer['version']}"
    troubles = list(_troubles(answer))
    yield from (["", "Trouble:", *(f"- {trouble}" for trouble in troubles)] if troubles else [])
    yield ""
    for source in answer["sources"]:
        age = "never" if source["age_s"] is None else f"{source['age_s']:.1f} s ago"
        yield f"source {source['name']}: {source['state']}, {source['blocks']} blocks, last {age}"
        # Each stage refuses for reasons of its own, and some have the same name.
        drops = Counter(source["dropped_blocks"]) + Counter(source["details"].get("dropped", {}))
        if drops:
            yield "  dropped: " + ", ".join(f"{reason} {count}" for reason, count in sorted(drops.items()))
    yield ""
    for point in answer["points"]:
        yield from _point(point)
    yield ""
    journal = answer["journal"]
    age = "nothing yet" if journal["last_commit_age_s"] is None else f"{journal['last_commit_age_s']:.0f} s ago"
    yield (
        f"journal {journal['path']}: {journal['size_bytes'] / 2**20:.1f} MiB, {journal['commits']} commits,"
        f" readings committed {age}, {journal['pending_s']:.0f} s wait"
    )
    for queue in answer["queues"]:
        yield (
            f"queue {queue['name']}: {queue['length']} of {queue['bound']}, at most {queue['highest']},"
            f" {queue['passed']} passed, {queue['dropped']} dropped"
        )


def _point(point: Mapping[str, Any]) -> Iterator[str]:
    yield f"{point['machine']}/{point['point']}"
    for measure, last in point["measures"].items():
        if last is None:
            yield f"  {measure}: no value yet"
            continue
        value = "no value" if last["value"] is None else f"{last['value']:.4g} {last['unit']} RMS"
        why = f", {last['cause']}" if last["cause"] else ""
        yield f"  {measure}: {value}, {last['quality']}{why}, {last['age_s']:.1f} s old"
    for alarm in point["alarms"]:
        unverified = "" if alarm["verified"] else ", not verified"
        yield f"  {alarm['alarm']}: {alarm['state']}{unverified}"
