"""The real clocks, read nowhere else."""

import os
import time
from datetime import UTC, datetime
from pathlib import Path

from humbell.model import Moment

_BOOT_ID = Path("/proc/sys/kernel/random/boot_id")
# Before this day no version of Humbell ran: a clock that says so has not been set since the computer started.
_SANE_NS = int(datetime(2026, 1, 1, tzinfo=UTC).timestamp()) * 10**9


def boot_id() -> str:
    """Return the id that the kernel gives this boot."""
    try:
        return _BOOT_ID.read_text().strip()
    except OSError:
        return f"process-{os.getpid()}"


class Clock:
    """Tells the moment on both clocks."""

    def __init__(self) -> None:
        self._boot = boot_id()

    def __call__(self) -> Moment:
        """Return the moment."""
        utc_ns = time.time_ns()
        return Moment(self._boot, time.monotonic_ns(), utc_ns, utc_ns >= _SANE_NS)
