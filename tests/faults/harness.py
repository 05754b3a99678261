"""The whole node under fire: the service as a process of its own, what it logs, answers, keeps and costs."""

import json
import os
import signal
import subprocess
import sys
import time
from collections.abc import Callable, Iterator, Mapping
from contextlib import contextmanager
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from humbell.app.control import ask, socket_path
from humbell.journal import (
    Entry,
    chunks,
    entries,
    last_seq,
    open_for_reading,
    readings,
    states,
    totals,
    transitions,
)
from humbell.journal.alarms import Stored
from humbell.model import AlarmId, Coverage, LifeCycle, Measure, OutOfReachError, PointId, Reading
from system.brokers import wait_for
from system.console import COMMAND, Done, call

HUMBELL = COMMAND
SIMULATOR = [sys.executable, "-c", "from humbell_sim.cli import main; main()"]
WITHIN_S = 45.0  # a start takes two seconds of computing, and the computer may be busy with other tests
STOP_S = 15.0  # the service gives itself 9 s, and is killed from outside after 10
EVERYTHING = 10**9  # rows


def environment(more: Mapping[str, str] | None = None) -> dict[str, str]:
    """Return the environment of a process under test: one BLAS thread, as the command line itself sets it."""
    return os.environ | {"OPENBLAS_NUM_THREADS": "1", "OMP_NUM_THREADS": "1"} | dict(more or {})


@dataclass
class Kept:
    """
    What a reader found committed in a journal.

    Args:
        entries: of the feed, by number.

        transitions: by number.

        chunks: begin and end of each with its values, by point, measure and begin.
    """

    entries: dict[int, Entry] = field(default_factory=dict)
    transitions: dict[int, Stored] = field(default_factory=dict)
    chunks: dict[tuple[PointId, Measure, int], tuple[int, bytes | None]] = field(default_factory=dict)


class Node:
    """
    One `humbell run` in a folder of its own, which can be killed and started again.

    Args:
        folder: of configuration, log and journal.

        text: of the configuration, without the journal's path.

        commit_s: seconds of readings in one commit.

        journal: folder of the journal, where it is another one.

        environ: more variables of the process's environment.
    """

    def __init__(
        self,
        folder: Path,
        text: str,
        commit_s: float = 5,
        journal: Path | None = None,
        environ: Mapping[str, str] | None = None,
    ) -> None:
        folder.mkdir(parents=True, exist_ok=True)
        self.journal = (journal or folder / "journal") / "journal.db"
        self.config = folder / "node.yaml"
        self.config.write_text(f"{text}journal: {{path: {self.journal}, commit_s: {commit_s:g}}}\n")
        self._log = folder / "log"
        self._log_from = 0
        self._environ = environ
        self._process: subprocess.Popen[bytes] | None = None
        self.began_s = 0.0

    @property
    def pid(self) -> int:
        """Of the process that runs."""
        assert self._process is not None
        return self._process.pid

    def launch(self) -> None:
        """Start it, without waiting for anything."""
        assert self._process is None
        self._log_from = self._log.stat().st_size if self._log.exists() else 0
        with self._log.open("ab") as log:
            self.began_s = time.monotonic()
            self._process = subprocess.Popen(
                [*HUMBELL, "run", str(self.config)],
                stdin=subprocess.DEVNULL,
                stdout=log,
                stderr=log,
                env=environment(self._environ),
            )

    def start(self, meanwhile: Callable[[], object] = lambda: None) -> None:
        """Start it and wait until it answers; do *meanwhile* again and again until then."""
        self.launch()

        def started() -> bool:
            meanwhile()
            assert self._process is not None
            assert self._process.poll() is None, f"it ended with {self._process.poll()}: {self.raw_log}"
            return bool(self.told("started"))

        wait_for(started, WITHIN_S, "the service has started")

    def kill(self) -> None:
        """End it at once, as a lack of memory would."""
        if self._process is not None:
            self._process.kill()
            self._process.wait(STOP_S)
            self._process = None

    def signal(self, number: signal.Signals) -> None:
        """Send it a signal."""
        assert self._process is not None
        self._process.send_signal(number)

    def wait(self, within_s: float = STOP_S) -> int:
        """Wait for its end and return its exit code."""
        assert self._process is not None
        code = self._process.wait(within_s)
        self._process = None
        return code

    def stop(self) -> int:
        """Have it end in good order, and return its exit code."""
        self.signal(signal.SIGTERM)
        return self.wait()

    @property
    def raw_log(self) -> str:
        """What it printed since it was last started."""
        if not self._log.exists():
            return ""
        with self._log.open("rb") as log:
            log.seek(self._log_from)
            return log.read().decode()

    @property
    def log(self) -> list[dict[str, Any]]:
        """What it logged since it was last started; every line is to be JSON."""
        text = self.raw_log
        # The last line may be on its way still.
        return [json.loads(line) for line in text[: text.rfind("\n") + 1].splitlines()]

    def told(self, event: str) -> list[dict[str, Any]]:
        """Return the events of that name."""
        return [one for one in self.log if one["event"] == event]

    def ask(self, **request: str) -> Mapping[str, Any]:
        """Return what it answers."""
        return ask(socket_path(self.journal), request)

    @property
    def status(self) -> Mapping[str, Any]:
        """How it says that it is doing."""
        return self.ask(ask="status")

    def source(self, name: str) -> Mapping[str, Any]:
        """How it says that one of its sources is doing."""
        return next(one for one in self.status["sources"] if one["name"] == name)

    @property
    def alarms(self) -> dict[str, tuple[str, bool, str | None]]:
        """State, whether it is verified, and occurrence of each alarm, as it says."""
        return {
            f"{one['machine']}/{one['point']}/{one['alarm']}": (one["state"], one["verified"], one["occurrence"])
            for one in self.ask(ask="alarms")["alarms"]
        }

    @property
    def answers(self) -> bool:
        """Whether it answers at all."""
        try:
            return bool(self.status)
        except OutOfReachError:
            return False

    def command(self, *arguments: str) -> Done:
        """Run another command with the same configuration, which stands behind the first word, or two of `alarms`."""
        words = 2 if arguments[0] == "alarms" else 1
        whole = [*arguments[:words], str(self.config), *arguments[words:]]
        if arguments[0] != "run" and not self._environ:
            # In this process, which saves the start.
            return call(*whole)
        done = subprocess.run(
            [*HUMBELL, *whole],
            capture_output=True,
            text=True,
            timeout=WITHIN_S,
            check=False,
            env=environment(self._environ),
        )
        return Done(done.returncode, done.stdout, done.stderr)

    def kept(self) -> Kept:
        """Return what is committed now."""
        with open_for_reading(self.journal) as journal:
            # One read transaction, so that all of it is of one moment.
            journal.execute("BEGIN")
            return Kept(
                {one.seq: one for one in entries(journal, 0, limit=EVERYTHING)},
                {one.seq: one for one in transitions(journal, limit=EVERYTHING)},
                {(c.point, c.measure, c.start_ns): (c.end_ns, c.readings) for c in chunks(journal)},
            )

    @property
    def last_seq(self) -> int:
        """The newest number in its journal."""
        with open_for_reading(self.journal) as journal:
            return last_seq(journal)

    def readings(self, measure: Measure = Measure.VELOCITY_RMS) -> dict[PointId, list[Reading]]:
        """Return the readings of one measure, point by point, in order of time."""
        found: dict[PointId, list[Reading]] = {}
        with open_for_reading(self.journal) as journal:
            for one in readings(journal):
                if one.measure is measure:
                    found.setdefault(PointId(one.machine, one.point), []).append(one)
        return {point: sorted(some, key=lambda one: one.time_ns) for point, some in found.items()}

    def life(self) -> dict[AlarmId, LifeCycle]:
        """Return the committed life-cycle state of each alarm."""
        with open_for_reading(self.journal) as journal:
            return {alarm: state.life_cycle for alarm, state in states(journal).items()}

    def coverage(self) -> dict[PointId, dict[Coverage, float]]:
        """Return the committed seconds of each point, by category."""
        with open_for_reading(self.journal) as journal:
            return {
                point: {category: account.seconds for category, account in accounts.items()}
                for point, accounts in totals(journal).items()
            }


@contextmanager
def node(folder: Path, text: str, **more: Any) -> Iterator[Node]:  # noqa: ANN401 - what Node takes
    """Yield a node that has not been started; whatever happens, its process ends."""
    made = Node(folder, text, **more)
    try:
        yield made
    finally:
        made.kill()


@contextmanager
def simulator(*arguments: str) -> Iterator[subprocess.Popen[str]]:
    """Yield a running `humbell-sim`; whatever happens, it ends."""
    process = subprocess.Popen(
        [*SIMULATOR, *arguments], stdout=subprocess.PIPE, stderr=subprocess.STDOUT, text=True, env=environment()
    )
    try:
        yield process
    finally:
        process.kill()
        process.communicate()
