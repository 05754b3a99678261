"""The command line: what each command takes. What it does is imported when it is called."""

import errno
import io
import os
import sys
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Annotated

import typer

from humbell import __version__
from humbell.model.errors import ConfigError, HumbellError, OutOfReachError

EXIT_WRONG_USE = 2
EXIT_OUT_OF_REACH = 3

_YEAR_S = 366 * 86_400.0  # no sensor sleeps longer, and times stay such as can be printed

app = typer.Typer(
    name="humbell",
    help="Watches rotating machines through permanently mounted accelerometers, day and night.",
    epilog="Exit codes: 0 done, 1 the answer is no, 2 wrong use or configuration, 3 a part was out of reach.",
    no_args_is_help=True,
    add_completion=False,
    pretty_exceptions_enable=False,
    rich_markup_mode=None,
)

Config = Annotated[Path, typer.Argument(metavar="CONFIG", help="The node's configuration, a YAML file.")]
AsJson = Annotated[bool, typer.Option("--json", help="Print JSON, for programs.")]


def _print_version(given: bool) -> None:
    if given:
        print(f"humbell {__version__}")
        raise typer.Exit


@app.callback()
def _common(
    _version: Annotated[
        bool,
        typer.Option("--version", is_eager=True, callback=_print_version, help="Print the version."),
    ] = False,
) -> None:
    pass


@app.command()
def check(config: Config, json: AsJson = False) -> None:
    """Read a configuration, and print what would be watched, by which limits, and what would not."""
    from humbell.cli.check import run as run_  # noqa: PLC0415 - a command is imported when it is called

    with _printing():
        run_(config, as_json=json)


@app.command()
def schema() -> None:
    """Print the JSON Schema of the configuration, for editors."""
    from humbell.cli.schema import run as run_  # noqa: PLC0415 - a command is imported when it is called

    with _printing():
        run_()


@app.command()
def replay(
    config: Config,
    files: Annotated[
        list[Path], typer.Argument(metavar="FILE...", help="Recordings, .wav or .npz, played one after the other.")
    ],
    point: Annotated[
        list[str] | None,
        typer.Option(
            metavar="MACHINE/POINT=CHANNEL",
            help="Take a point's signal from another channel of the files, such as p-101/de-h=1. May be repeated.",
        ),
    ] = None,
    start: Annotated[
        str | None,
        typer.Option(
            metavar="TIME", help="Time of the first sample, with a zone: 2026-03-01T10:00:00Z. Default: the file's."
        ),
    ] = None,
    piece_every: Annotated[
        float | None,
        typer.Option(metavar="SECONDS", max=_YEAR_S, help="From the start of one piece to that of the next."),
    ] = None,
    json: AsJson = False,
) -> None:
    """Run recorded files through the same chain as live signals, as fast as they are read."""
    from humbell.cli.replay import run as run_  # noqa: PLC0415 - a command is imported when it is called

    with _printing():
        run_(config, files, point or [], start, piece_every, as_json=json)


class _ReadEnoughError(Exception):
    """Whoever reads our output has read enough, as `head` does. Under its own name Typer would make a failure of it."""


@contextmanager
def _printing() -> Iterator[None]:
    """Print all that is printed inside, to the last letter."""
    try:
        yield
        print(end="", flush=True)
    except BrokenPipeError:
        _drop_output()
        raise _ReadEnoughError from None
    except OSError as error:
        if error.errno != errno.ENOSPC:
            raise
        _drop_output()
        raise OutOfReachError("standard output: the disk is full (make room, or write elsewhere)") from None


def _drop_output() -> None:
    # Python would try again at exit, and complain.
    os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())


@app.command()
def run(config: Config) -> None:
    """Watch: read the sources, measure, judge, and write the journal, until told to stop."""
    from humbell.cli.run import run as run_  # noqa: PLC0415 - a command is imported when it is called

    with _printing():
        code = run_(config)
    raise typer.Exit(code)


@app.command()
def status(config: Config, json: AsJson = False) -> None:
    """Print how the running service is doing: sources, points, queues, journal."""
    from humbell.cli.status import run as run_  # noqa: PLC0415 - a command is imported when it is called

    with _printing():
        code = run_(config, as_json=json)
    raise typer.Exit(code)


alarms_app = typer.Typer(help="Alarms: what stands, what was, and what to acknowledge.", no_args_is_help=True)
app.add_typer(alarms_app, name="alarms")


@alarms_app.command("list")
def alarms_list(config: Config, json: AsJson = False) -> None:
    """Print every alarm that is not plainly normal; exit code 1 where one is."""
    from humbell.cli.alarms import run as run_  # noqa: PLC0415 - a command is imported when it is called

    with _printing():
        code = run_(config, as_json=json)
    raise typer.Exit(code)


@alarms_app.command("history")
def alarms_history(
    config: Config,
    limit: Annotated[int, typer.Option(min=1, help="How many transitions.")] = 100,
    json: AsJson = False,
) -> None:
    """Print the last transitions, oldest first."""
    from humbell.cli.alarms import history  # noqa: PLC0415 - a command is imported when it is called

    with _printing():
        code = history(config, limit, as_json=json)
    raise typer.Exit(code)


@alarms_app.command("acknowledge")
def alarms_acknowledge(
    config: Config,
    alarm: Annotated[str, typer.Argument(metavar="MACHINE/POINT/ALARM", help="Such as p-101/de-h/velocity_rms.high.")],
    note: Annotated[str, typer.Option(help="Why, or what is being done.")] = "",
    json: AsJson = False,
) -> None:
    """Acknowledge an alarm, in your name."""
    from humbell.cli.alarms import acknowledge  # noqa: PLC0415 - a command is imported when it is called

    with _printing():
        code = acknowledge(config, alarm, note, as_json=json)
    raise typer.Exit(code)


From = Annotated[str | None, typer.Option("--from", metavar="TIME", help="Begin, with a zone: 2026-03-01T10:00:00Z.")]
To = Annotated[str | None, typer.Option("--to", metavar="TIME", help="End, with a zone.")]


@app.command()
def coverage(config: Config, start: From = None, end: To = None, json: AsJson = False) -> None:
    """Print what the committed seconds of each point were: measured, or why not."""
    from humbell.cli.coverage import run as run_  # noqa: PLC0415 - a command is imported when it is called

    with _printing():
        code = run_(config, start, end, as_json=json)
    raise typer.Exit(code)


@app.command()
def export(
    config: Config,
    start: From = None,
    end: To = None,
    point: Annotated[str | None, typer.Option(metavar="MACHINE/POINT", help="Of one point only.")] = None,
    json: AsJson = False,
) -> None:
    """Print the readings in the journal as CSV, or as JSON lines."""
    from humbell.cli.export import run as run_  # noqa: PLC0415 - a command is imported when it is called

    with _printing():
        code = run_(config, start, end, point, as_json=json)
    raise typer.Exit(code)


def main() -> None:
    """Run the command line; every error that the user can mend is one line each, without a traceback."""
    # More threads only get in each other's way on a small computer that does other things. Before NumPy is imported.
    for name in ("OPENBLAS_NUM_THREADS", "OMP_NUM_THREADS"):
        os.environ.setdefault(name, "1")
    if isinstance(sys.stdout, io.TextIOWrapper):
        sys.stdout.reconfigure(errors="backslashreplace")  # an old terminal's alphabet is no reason to stop
    try:
        app()
    except ConfigError as error:
        _complain(error, EXIT_WRONG_USE)
    except HumbellError as error:
        _complain(error, EXIT_OUT_OF_REACH)
    except _ReadEnoughError:
        sys.exit(0)


def _complain(error: Exception, code: int) -> None:
    print(error, file=sys.stderr)
    sys.exit(code)
