"""A node's load on its journal: sixteen points with four measures, a reading a second each; also as a process."""

import itertools
import json
import os
import subprocess
import sys
from pathlib import Path

import numpy as np

from humbell.alarms import AlarmState
from humbell.journal import Journal, JournalSettings, Watched, open_for_reading, transitions
from humbell.model import AlarmId, AlarmType, LifeCycle, Measure, Moment, PointId, Quality, Reading, Transition

SECOND_NS = 1_000_000_000
START_NS = 1_772_359_200 * SECOND_NS  # 2026-03-01T10:00:00Z
POINTS = [PointId(f"p-{101 + number // 4}", f"b{number % 4}-h") for number in range(16)]
JUDGED = (Measure.VELOCITY_RMS, Measure.ACCELERATION_RMS)
ALARMS = [AlarmId(p.machine, p.point, measure, kind) for p in POINTS for measure in JUDGED for kind in AlarmType]
WATCHED = Watched(
    digest="d" * 64,
    content="site: tarnholm-water",
    counted=dict.fromkeys(POINTS, Measure.VELOCITY_RMS),
    judged={(point, measure) for point in POINTS for measure in JUDGED},
    kept=set(JUDGED),
)
# What the one under power cuts writes: small chunks, so that many are begun and ended.
CHUNK_S, CHUNK_POINTS = 30, 4
STATES = {alarm: AlarmState(verified=True, last_ns=START_NS) for alarm in ALARMS}


class Simulated:
    """A clock that stands where it is put, seconds after the beginning."""

    def __init__(self) -> None:
        self.second = 0.0

    def __call__(self) -> Moment:
        """Return the moment."""
        since_ns = round(self.second * SECOND_NS)
        return Moment("boot-1", since_ns, START_NS + since_ns)


def journal(folder: Path, clock: Simulated, **settings: object) -> Journal:
    """Return the journal in *folder*, not opened yet."""
    return Journal(JournalSettings.model_validate({"path": folder / "journal.db", **settings}), WATCHED, clock)


def second_of(second: int, random: np.random.Generator, points: int = len(POINTS)) -> list[Reading]:
    """Return what a second brings: machines that run evenly, within some five per cent."""
    values = 2.3 * (1 + 0.05 * random.standard_normal((points, len(Measure))))
    end_ns = START_NS + second * SECOND_NS
    return [
        Reading(end_ns, point.machine, point.point, measure, value, 1.0, Quality.GOOD)
        for point, row in zip(POINTS, values.tolist(), strict=False)
        for measure, value in zip(Measure, row, strict=True)
    ]


def minute_of(minute: int, random: np.random.Generator) -> list[Reading]:
    """Return what a minute brings."""
    return [one for second in range(60 * minute + 1, 60 * minute + 61) for one in second_of(second, random)]


def numbered(number: int) -> tuple[Transition, AlarmState]:
    """Return a transition whose value is its *number*, with the state that it leads to."""
    alarm = ALARMS[number % len(ALARMS)]
    told = Transition(
        time_ns=START_NS + number,
        alarm=alarm,
        before=LifeCycle.NORMAL,
        after=LifeCycle.UNACKNOWLEDGED,
        verified=True,
        value=float(number),
        limit=4.5,
        occurrence=f"{number}",
    )
    return told, AlarmState(LifeCycle.UNACKNOWLEDGED, verified=True, occurrence=f"{number}", last_ns=told.time_ns)


def told(path: Path) -> list[int]:
    """Return the numbers of the transitions that a reader of the journal at *path* sees."""
    with open_for_reading(path) as connection:
        return [round(stored.transition.value) for stored in transitions(connection, limit=10**6)]


def written_bytes() -> int:
    """Return how many bytes this process has caused to be written to a storage device so far (proc(5))."""
    counts = dict(line.split(": ") for line in Path("/proc/self/io").read_text().splitlines())
    return int(counts["write_bytes"])


def keep_for(folder: Path, minutes: int) -> None:
    """Keep a journal for that time, as fast as it goes, with six transitions an hour; print what was written for it."""
    clock = Simulated()
    kept = journal(folder, clock)
    kept.open()
    before, random = written_bytes(), np.random.default_rng(1)
    for minute in range(minutes):
        for reading in minute_of(minute, random):
            kept.add(reading)
        clock.second = 60.0 * minute + 60
        kept.commit(STATES)
        if minute % 60 < len(LifeCycle):
            kept.tell(*numbered(minute))
    cost = written_bytes() - before
    kept.close()
    print(json.dumps({"written": cost, "file": kept.settings.path.stat().st_size}))


def write_until_killed(folder: Path) -> None:
    """Tell transitions and commit chunks as fast as it goes, and print what was begun, told and committed."""
    clock = Simulated()
    kept = journal(folder, clock)
    kept.open()
    random, number = np.random.default_rng(0), 0
    for chunk in itertools.count():
        _say("begun", chunk)
        for second in range(CHUNK_S * chunk + 1, CHUNK_S * (chunk + 1) + 1):
            for reading in second_of(second, random, CHUNK_POINTS):
                kept.add(reading)
        clock.second = float(CHUNK_S * (chunk + 1))
        for _ in range(4):
            kept.tell(*numbered(number))
            _say("told", number)
            number += 1
        kept.commit(STATES)
        _say("committed", chunk)


def _say(what: str, number: int) -> None:
    print(what, number, flush=True)


def start(what: str, *arguments: object) -> subprocess.Popen[str]:
    """Start this file as a process of its own, whose output can be read."""
    tests = Path(__file__).parents[1]
    return subprocess.Popen(
        [sys.executable, "-m", "faults.load", what, *map(str, arguments)],
        cwd=tests,
        stdout=subprocess.PIPE,
        text=True,
        env=os.environ | {"OPENBLAS_NUM_THREADS": "1"},
    )


if __name__ == "__main__":
    match sys.argv[1:]:
        case ["keep", folder, minutes]:
            keep_for(Path(folder), int(minutes))
        case ["write", folder]:
            write_until_killed(Path(folder))
