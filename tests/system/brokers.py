"""Real MQTT brokers for tests: mosquitto, each on a free loopback port and in a folder of its own."""

import getpass
import os
import shutil
import signal
import socket
import subprocess
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path

READY_S = 10.0  # mosquitto listens after 0.02 s; a loaded machine may be slow to start a process
STOP_S = 10.0


def wait_for(condition: Callable[[], object], within_s: float, what: str) -> float:
    """Return after how many seconds *condition* held; fail when it does not within *within_s*."""
    began_s = time.monotonic()
    while not condition():
        assert time.monotonic() - began_s < within_s, f"not within {within_s:g} s: {what}"
        time.sleep(0.005)
    return time.monotonic() - began_s


def free_port() -> int:
    """Return a loopback port at which nothing listens."""
    with socket.socket() as probe:
        probe.bind(("127.0.0.1", 0))
        return int(probe.getsockname()[1])


class Mosquitto:
    """
    One broker, which can be killed and started again on the same port with what it had stored.

    Args:
        folder: for its files.

        lines: of its configuration, beside listener and persistence.
    """

    def __init__(self, folder: Path, *lines: str) -> None:
        folder.mkdir(parents=True, exist_ok=True)
        self._folder = folder
        self.port = free_port()
        self._process: subprocess.Popen[bytes] | None = None
        self._store = folder / "mosquitto.db"
        configuration = [
            f"listener {self.port} 127.0.0.1",
            # As root it would turn into a user who cannot read the test's folder.
            f"user {getpass.getuser()}",
            "persistence true",
            f"persistence_location {folder}/",
            "log_dest file " + str(folder / "log"),
            "log_type all",
            *lines,
        ]
        (folder / "mosquitto.conf").write_text("\n".join(configuration) + "\n")

    @property
    def log(self) -> str:
        """What it logged so far."""
        path = self._folder / "log"
        return path.read_text() if path.exists() else ""

    def start(self) -> None:
        """Start it and wait until it listens."""
        program = shutil.which("mosquitto", path=f"{os.environ['PATH']}:/usr/sbin")
        assert program is not None, "mosquitto is missing (install it)"
        with (self._folder / "output").open("ab") as output:
            self._process = subprocess.Popen(
                [program, "-c", str(self._folder / "mosquitto.conf")], stdout=output, stderr=output
            )
        wait_for(self._listens, READY_S, f"mosquitto listens on {self.port}: {self._output()}")

    def store(self) -> None:
        """Have it write to disk all that it would keep over an orderly stop, and wait until it has."""
        assert self._process is not None
        before = self._stamp()
        self._process.send_signal(signal.SIGUSR1)
        wait_for(lambda: self._stamp() != before, STOP_S, "mosquitto has written its store")

    def kill(self) -> None:
        """End it at once, as a power cut would."""
        if self._process is not None:
            self._process.kill()
            self._process.wait(STOP_S)
            self._process = None

    def stop(self) -> None:
        """End it in good order."""
        if self._process is not None:
            self._process.terminate()
            try:
                self._process.wait(STOP_S)
            except subprocess.TimeoutExpired:
                self.kill()
            self._process = None

    def freeze(self) -> None:
        """Have it stand still, with its connections open."""
        assert self._process is not None
        self._process.send_signal(signal.SIGSTOP)

    def thaw(self) -> None:
        """Have it go on."""
        assert self._process is not None
        self._process.send_signal(signal.SIGCONT)

    def _listens(self) -> bool:
        assert self._process is not None
        assert self._process.poll() is None, self._output()
        try:
            with socket.create_connection(("127.0.0.1", self.port), timeout=1):
                return True
        except OSError:
            return False

    def _output(self) -> str:
        return (self._folder / "output").read_text() + self.log

    def _stamp(self) -> tuple[int, int] | None:
        # It writes another file and renames it, so that the inode changes as well.
        try:
            found = self._store.stat()
        except FileNotFoundError:
            return None
        return found.st_ino, found.st_mtime_ns


@contextmanager
def mosquitto(folder: Path, *lines: str) -> Iterator[Mosquitto]:
    """Yield a broker that runs; without *lines* it lets everybody in."""
    broker = Mosquitto(folder, *(lines or ("allow_anonymous true",)))
    try:
        broker.start()
        yield broker
    finally:
        broker.stop()
