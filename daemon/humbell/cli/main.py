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
from humbell.model.errors import ConfigError, InputError, OutOfReachError

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
    from humbell.cli.check import run  # noqa: PLC0415 - a command is imported when it is called

    with _printing():
        run(config, as_json=json)


@app.command()
def schema() -> None:
    """Print the JSON Schema of the configuration, for editors."""
    from humbell.cli.schema import run  # noqa: PLC0415 - a command is imported when it is called

    with _printing():
        run()


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
    from humbell.cli.replay import run  # noqa: PLC0415 - a command is imported when it is called

    with _printing():
        run(config, files, point or [], start, piece_every, as_json=json)


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
    except (InputError, OutOfReachError) as error:
        _complain(error, EXIT_OUT_OF_REACH)
    except _ReadEnoughError:
        sys.exit(0)


def _complain(error: Exception, code: int) -> None:
    print(error, file=sys.stderr)
    sys.exit(code)
