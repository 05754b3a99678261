"""The command line as its users run it, and recordings for it."""

import contextlib
import io
import os
import subprocess
import sys
from dataclasses import dataclass
from pathlib import Path
from typing import Any
from unittest import mock

import numpy as np
from numpy.typing import NDArray
from scipy.io import wavfile

from humbell.cli.main import main

COMMAND = [sys.executable, "-m", "humbell.cli"]
PATIENCE_S = 60.0  # a start takes two seconds of computing, and the computer may be busy

RATE_HZ = 2560
SECONDS = 12.5

# Velocity alone, so that a rate of 2560 Hz is enough; three seconds raise the alarm.
CONFIG = """\
site: tarnholm-water
node: pumphouse-1
sources:
  tape: {kind: replay, unit: m/s2}
machines:
  p-101:
    name: Raw water pump 1
    speed: {rpm: 1480}
    points:
      de-h:
        channel: tape/0
        mount: stud
        velocity: {high: 4.5, high_high: 7.1, deadband: 0.3, on_delay_s: 3, off_delay_s: 3}
        acceleration: off
"""


@dataclass(frozen=True)
class Done:
    """
    A command that has ended.

    Args:
        code: its exit code.

        out: what it printed.

        err: what it complained about, and progress.
    """

    code: int
    out: str
    err: str

    @property
    def lines(self) -> list[str]:
        """What it printed, line by line."""
        return self.out.splitlines()


def start(*arguments: str | Path) -> Done:
    """Run a command as a process of its own, with both outputs in pipes."""
    done = subprocess.run(
        [*COMMAND, *map(str, arguments)], capture_output=True, text=True, timeout=PATIENCE_S, check=False
    )
    return Done(done.returncode, done.stdout, done.stderr)


def call(*arguments: str | Path, encoding: str = "utf-8", output: io.TextIOWrapper | None = None) -> Done:
    """
    Run a command in this process, which saves the start; what it raises past its own handling is raised here.

    Args:
        arguments: of the command.

        encoding: of the terminal or pipe.

        output: where to print; None to return it.
    """
    buffer, err = io.BytesIO(), io.StringIO()
    out = output or io.TextIOWrapper(buffer, encoding)
    code: Any = 0
    with (
        mock.patch.object(sys, "argv", ["humbell", *map(str, arguments)]),
        mock.patch.object(sys, "excepthook", sys.excepthook),
        mock.patch.dict(os.environ),
        contextlib.redirect_stdout(out),
        contextlib.redirect_stderr(err),
    ):
        try:
            main()
        except SystemExit as left:
            code = left.code or 0
    out.flush()
    assert isinstance(code, int)
    return Done(code, buffer.getvalue().decode(encoding), err.getvalue())


def vibration(seconds: float = SECONDS) -> NDArray[np.float32]:
    """Return (2, n) m/s²: 50 Hz of 2 mm/s RMS, which jumps to 6 mm/s after 4 s, and a channel of 1 mm/s throughout."""
    time_s = np.arange(round(seconds * RATE_HZ)) / RATE_HZ
    wave = np.sqrt(2) / 1000 * 2 * np.pi * 50 * np.cos(2 * np.pi * 50 * time_s)
    noise = np.random.default_rng(3).normal(0, 0.02, (2, time_s.size))
    return np.asarray(np.stack([np.where(time_s < 4, 2.0, 6.0) * wave, wave]) + noise, np.float32)


def npz(path: Path, x: NDArray[Any], **more: object) -> Path:
    """Write an NPZ file in m/s², with other arrays or values where they are given."""
    arrays: dict[str, Any] = {"x": x, "fs": float(RATE_HZ), "unit": "m/s2"} | more
    np.savez(path, **arrays)
    return path


def wav(path: Path, x: NDArray[Any], rate_hz: int = RATE_HZ) -> Path:
    """Write (channels, n) as a WAV file of the array's own type."""
    wavfile.write(path, rate_hz, x.T)
    return path


def config(folder: Path, text: str = CONFIG) -> Path:
    """Write a configuration."""
    path = folder / "node.yaml"
    path.write_text(text, encoding="utf-8")
    return path
