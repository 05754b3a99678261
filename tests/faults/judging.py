"""What figures the tests of faults rest on: what a process costs, and whether readings leave no second out."""

import os
from dataclasses import dataclass
from itertools import pairwise
from pathlib import Path

from humbell.model import Reading


@dataclass(frozen=True)
class Cost:
    """
    What a process has used.

    Args:
        cpu_s: processor time, its own and the kernel's for it.

        rss_mib: the most memory that it ever held.
    """

    cpu_s: float
    rss_mib: float


def cost(pid: int) -> Cost:
    """Return what the process *pid*, which runs, has used so far."""
    # The name in parentheses may hold spaces; utime and stime are the 14th and 15th field (proc(5)).
    fields = Path(f"/proc/{pid}/stat").read_text().rpartition(")")[2].split()
    ticks = int(fields[11]) + int(fields[12])
    status = dict(line.split(":", 1) for line in Path(f"/proc/{pid}/status").read_text().splitlines())
    return Cost(ticks / os.sysconf("SC_CLK_TCK"), int(status["VmHWM"].split()[0]) / 1024)


def joined(some: list[Reading], tolerance_s: float) -> bool:
    """Return whether each second from the first reading to the last one is told exactly once."""
    return all(
        abs((after.time_ns - before.time_ns) / 1e9 - after.span_s) <= tolerance_s for before, after in pairwise(some)
    )
