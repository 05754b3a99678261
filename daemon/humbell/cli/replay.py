"""`humbell replay`."""

import sys
from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager
from pathlib import Path

from rich.console import Console
from rich.progress import BarColumn, Progress, TextColumn, TimeRemainingColumn

from humbell.app.identity import read_serial
from humbell.app.jsonlines import coverage_line, reading_line, transition_line
from humbell.app.replay import Replay, ReplayRequest
from humbell.cli.ask import time_ns
from humbell.cli.summary import Summary
from humbell.config import load
from humbell.model import ChannelId, ConfigError, PointId, Reading


def run(
    config: Path,
    files: Sequence[Path],
    points: Sequence[str],
    start: str | None,
    piece_every_s: float | None,
    *,
    as_json: bool,
) -> None:
    """
    Replay *files* and print JSON lines, or a summary.

    Raises:
        ConfigError: configuration, arguments and files do not fit together.

        InputError: a file is not what it says it is.
    """
    loaded = load(config)
    channels = dict(_point(text) for text in points)
    request = ReplayRequest(files, channels, None if start is None else time_ns("--start", start), piece_every_s)
    replay = Replay(loaded.site, request, read_serial)
    summary = Summary(replay.site)
    with _progress(replay.seconds) as progress:
        for told in replay.run(progress):
            if not as_json:
                summary.feed(told)
            elif isinstance(told, Reading):
                print(reading_line(told))
            else:
                print(transition_line(told))
    if as_json:
        for name, seconds in replay.coverage():
            print(coverage_line(name, seconds))
    else:
        print(summary.text(replay.recordings, dict(replay.coverage())))


def _point(text: str) -> tuple[PointId, ChannelId]:
    name, equals, channel = text.partition("=")
    machine, slash, point = name.partition("/")
    if not (equals and slash and machine and point):
        raise ConfigError(f"--point {text}: has another form (give MACHINE/POINT=CHANNEL, such as p-101/de-h=0)")
    if channel.isascii() and channel.isdigit():
        return PointId(machine, point), ChannelId("", int(channel))
    try:
        return PointId(machine, point), ChannelId.parse(channel)
    except ValueError as error:
        raise ConfigError(f"--point {text}: {error}") from None


@contextmanager
def _progress(seconds: float) -> Iterator[Callable[[float], None]]:
    """Show a bar on a terminal; in a pipe nothing."""
    if not sys.stderr.isatty():
        yield lambda _: None
        return
    columns = (
        TextColumn("{task.completed:.0f} of {task.total:.0f} s of signal"),
        BarColumn(),
        TimeRemainingColumn(),
    )
    with Progress(*columns, console=Console(stderr=True), transient=True) as progress:
        task = progress.add_task("", total=seconds)
        yield lambda played_s: progress.update(task, completed=played_s)
