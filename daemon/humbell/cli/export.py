"""`humbell export`."""

import csv
import math
import sys
from pathlib import Path

from humbell.app.jsonlines import reading_line, utc_text
from humbell.cli.ask import read, time_ns
from humbell.journal import open_for_reading, readings
from humbell.model import ConfigError, PointId, Reading

_COLUMNS = ("time", "machine", "point", "measure", "value", "unit", "span_s", "quality", "cause")


def run(config: Path, start: str | None, end: str | None, point: str | None, *, as_json: bool) -> int:
    """
    Print the single values of the journal as CSV, or as JSON lines.

    Raises:
        ConfigError: *config*, a time or the point cannot be used.

        JournalError: there is no journal to read.
    """
    loaded = read(config)
    start_ns = 0 if start is None else time_ns("--from", start)
    end_ns = 2**63 - 1 if end is None else time_ns("--to", end)
    name = None if point is None else _point(point)
    table = csv.writer(sys.stdout, lineterminator="\n")
    if not as_json:
        table.writerow(_COLUMNS)
    with open_for_reading(loaded.site.journal.path) as journal:
        for reading in readings(journal, start_ns, end_ns, name):
            if as_json:
                print(reading_line(reading))
            else:
                table.writerow(_row(reading))
    return 0


def _row(reading: Reading) -> tuple[str, ...]:
    return (
        utc_text(reading.time_ns),
        reading.machine,
        reading.point,
        reading.measure,
        f"{reading.value:.6g}" if math.isfinite(reading.value) else "",
        reading.unit,
        f"{reading.span_s:.6g}",
        reading.quality,
        reading.cause or "",
    )


def _point(text: str) -> PointId:
    machine, slash, point = text.partition("/")
    if not (slash and machine and point):
        raise ConfigError(f"--point {text}: is no point (give MACHINE/POINT, such as p-101/de-h)")
    return PointId(machine, point)
