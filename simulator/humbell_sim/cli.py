"""`humbell-sim`: writes recordings of simulated machines, and sends what they say to a broker."""

import os
import signal
import ssl
import sys
import threading
import time
from datetime import datetime
from pathlib import Path
from typing import Annotated

import numpy as np
import typer
from pydantic import TypeAdapter, ValidationError

from humbell.model import Id
from humbell_sim.settings import TarnholmSettings
from humbell_sim.tarnholm import CHANNELS, RATE_HZ, STORY_S, renderer

EXIT_NO = 1

app = typer.Typer(
    help="Makes synthetic signals of faulty machines.",
    epilog="Exit codes: 0 done, 1 the answer is no (not all was confirmed), 2 wrong use.",
    no_args_is_help=True,
    add_completion=False,
    pretty_exceptions_enable=False,
    rich_markup_mode=None,
)

Seed = Annotated[int, typer.Option(min=0, help="The same seed gives the same samples.")]


@app.callback()
def _common() -> None:
    pass


@app.command()
def record(
    file: Annotated[Path, typer.Argument(metavar="FILE", help="The recording to write, .npz.")],
    seconds: Annotated[float, typer.Option(min=1, max=3600, help="Length of the recording, s.")] = STORY_S,
    seed: Seed = 1,
) -> None:
    """Write a recording of the invented Tarnholm Water works: three channels in g."""
    if file.suffix != ".npz":
        raise typer.BadParameter(f"{file} does not end in .npz (give such a name)")
    samples = renderer(seed).render(0, round(seconds * RATE_HZ))
    np.savez(file, x=samples, fs=RATE_HZ, unit="g")
    print(f"{file}: {seconds:g} s, {len(samples)} channels at {RATE_HZ:g} Hz")


@app.command()
def feed(
    source: Annotated[
        list[str],
        typer.Option(metavar="ID", help="Send as this source. May be repeated: as many senders, each its own seed."),
    ],
    host: Annotated[str, typer.Option(help="The broker's name or address.")] = "127.0.0.1",
    port: Annotated[
        int | None, typer.Option(min=1, max=65535, help="Its port. Default: 1883, with TLS 8883.", show_default=False)
    ] = None,
    channels: Annotated[int, typer.Option(help="Channels of each source, 1 to 64.")] = CHANNELS,
    rate: Annotated[float, typer.Option(metavar="HZ", help="Samples a second and channel.")] = RATE_HZ,
    seconds: Annotated[
        float | None, typer.Option(help="Seconds of signal to send. Default: until stopped.", show_default=False)
    ] = None,
    pace: Annotated[float, typer.Option(help="Seconds of signal a second; 0: flat out.")] = 1.0,
    block: Annotated[float, typer.Option(metavar="SECONDS", help="Signal in one block.")] = 0.25,
    seed: Seed = 1,
    start: Annotated[
        str | None,
        typer.Option(
            metavar="TIME",
            help="Time of the first sample, with a zone: 2026-03-01T10:00:00Z. Default: now. "
            "The same start and seed make the same blocks, which a receiver may drop as redelivered.",
            show_default=False,
        ),
    ] = None,
    user: Annotated[str | None, typer.Option(help="User name at the broker.", show_default=False)] = None,
    password_env: Annotated[
        str | None,
        typer.Option(metavar="NAME", help="Variable of the environment that holds the password.", show_default=False),
    ] = None,
    ca: Annotated[
        Path | None,
        typer.Option(metavar="FILE", help="Use TLS, and trust these authorities (PEM).", show_default=False),
    ] = None,
    certificate: Annotated[
        Path | None, typer.Option(metavar="FILE", help="Our own certificate for TLS (PEM).", show_default=False)
    ] = None,
    key: Annotated[
        Path | None, typer.Option(metavar="FILE", help="Its key, if not in the same file.", show_default=False)
    ] = None,
) -> None:
    """
    Send blocks of the Tarnholm Water works to an MQTT broker, until each is confirmed.

    Prints one line at the end: blocks sent, confirmed and resent, and the seconds it took.
    """
    from humbell_sim.blocks import Blocks  # noqa: PLC0415 - only this command needs the MQTT library
    from humbell_sim.feeds import Sender, run_all  # noqa: PLC0415 - the same
    from humbell_sim.link import Broker, MqttLink  # noqa: PLC0415 - the same

    start_ns = time.time_ns() if start is None else _start_ns(start)
    settings = [_settings(channels, rate, seed + number, pace, seconds, block) for number in range(len(source))]
    tls = _tls(ca, certificate, key)
    broker = Broker(host, port or (1883 if tls is None else 8883), user, _password(user, password_env), tls)
    stop = threading.Event()
    for number in (signal.SIGTERM, signal.SIGINT):
        signal.signal(number, lambda *_: stop.set())

    def sender(name: str, one: TarnholmSettings) -> Sender:
        # A client id of this process: two with the same would throw each other out for ever.
        connect = lambda: MqttLink(broker, f"humbell-sim-{name}-{os.getpid()}", time.monotonic)  # noqa: E731
        return Sender(Blocks(name, one, start_ns), connect, stop, time.monotonic, _tell)

    senders = [sender(name, one) for name, one in zip(_sources(source), settings, strict=True)]
    began_s = time.monotonic()
    tally = run_all(senders, stop)
    took_s = time.monotonic() - began_s
    print(f"{tally.sent} blocks sent, {tally.confirmed} confirmed, {tally.resent} resent, {took_s:.1f} s", flush=True)
    if not all(one.complete for one in senders):
        raise typer.Exit(EXIT_NO)


def _sources(names: list[str]) -> list[str]:
    for name in names:
        try:
            TypeAdapter(Id).validate_python(name)
        except ValidationError:
            raise typer.BadParameter(
                f"--source {name}: is no id (use a-z, 0-9, '.', '_' and '-', such as wifi-1)"
            ) from None
    if len(set(names)) < len(names):
        raise typer.BadParameter("--source: the same id twice (give each sender its own)")
    return names


def _settings(
    channels: int, rate_hz: float, seed: int, pace: float, seconds: float | None, block_s: float
) -> TarnholmSettings:
    try:
        return TarnholmSettings(
            kind="tarnholm",
            channels=channels,
            rate_hz=rate_hz,
            seed=seed,
            pace=pace,
            seconds=seconds,
            block_s=block_s,
        )
    except ValidationError as error:
        lines = (
            ": ".join((*(str(part) for part in one["loc"]), one["msg"].removeprefix("Value error, ")))
            for one in error.errors()
        )
        raise typer.BadParameter("; ".join(lines)) from None


def _start_ns(text: str) -> int:
    try:
        start = datetime.fromisoformat(text)
    except ValueError:
        raise typer.BadParameter(f"--start {text}: is no time (give one such as 2026-03-01T10:00:00Z)") from None
    if start.tzinfo is None:
        raise typer.BadParameter(f"--start {text}: has no zone (add Z for UTC, or an offset such as +01:00)")
    seconds = int(start.replace(microsecond=0).timestamp())
    if seconds < 0:
        raise typer.BadParameter(f"--start {text}: lies before 1970 (give a later one)")
    return (seconds * 1_000_000 + start.microsecond) * 1000


def _password(user: str | None, name: str | None) -> str | None:
    if name is None:
        return None
    if user is None:
        raise typer.BadParameter("--password-env: a password needs a user name (add --user)")
    password = os.environ.get(name)
    if not password:
        raise typer.BadParameter(f"--password-env: the environment has no variable {name} (set it before the start)")
    return password


def _tls(ca: Path | None, certificate: Path | None, key: Path | None) -> ssl.SSLContext | None:
    if ca is None:
        if certificate or key:
            raise typer.BadParameter("--certificate and --key go with TLS (add --ca)")
        return None
    if key and not certificate:
        raise typer.BadParameter("--key: is the key of a certificate (add --certificate)")
    try:
        context = ssl.create_default_context(cafile=ca)
        if certificate:
            context.load_cert_chain(certificate, key)
    except (OSError, ssl.SSLError) as error:
        raise typer.BadParameter(f"--ca, --certificate, --key: cannot be used: {error} (give PEM files)") from None
    return context


def _tell(line: str) -> None:
    print(line, file=sys.stderr, flush=True)


def main() -> None:
    """Run the command line."""
    app()
