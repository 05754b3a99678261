"""Runs a service until it is told to stop: signals, order, bounded time."""

import signal
import threading
import time
from collections.abc import Mapping, Sequence
from types import FrameType
from typing import Any

import structlog

from humbell.app.clock import Clock
from humbell.app.control import Control, socket_path
from humbell.app.make import make_sources
from humbell.app.service import Service
from humbell.app.status import handle
from humbell.config import Loaded

_log = structlog.get_logger()
# All of the stop, whatever hangs: below the 10 s after which the process is killed from outside.
_STOP_S = 9.0
_ENOUGH_SIGNALS = 2  # who sends another one does not want to wait
_TURN_S = 0.1


def run(loaded: Loaded) -> int:
    """
    Run until SIGTERM or SIGINT, or until every source has ended; return the exit code.

    A second signal skips the wait for what hangs.

    Raises:
        ConfigError: sources or socket cannot be made.

        OutOfReachError: the disk is full or away.

        JournalError: there can be no journal.
    """
    heard: list[int] = []

    def on_signal(number: int, _frame: FrameType | None) -> None:
        # No event, no log: whatever has a lock may be held by the very code that the signal interrupts.
        heard.append(number)

    for number in (signal.SIGTERM, signal.SIGINT):
        signal.signal(number, on_signal)

    def answer(request: Mapping[str, Any]) -> Mapping[str, Any]:
        return handle(service, request)

    clock = Clock()
    sources = make_sources(loaded.site)
    # Before the journal is opened: who finds another one running must not touch its journal.
    control = Control(socket_path(loaded.site.journal.path), answer)
    try:
        service = Service(loaded, sources, clock)
    except BaseException:
        control.close()
        raise
    service.start()
    control.task.start()
    _log.info("started", site=loaded.site.site, node=service.node, sources=list(loaded.site.sources))
    while not heard and not service.ended:
        time.sleep(_TURN_S)
    if heard:
        _log.info("signal", signal=signal.Signals(heard[0]).name)
    return _stop(service, control, heard)


def _stop(service: Service, control: Control, heard: Sequence[int]) -> int:
    """Stop, in a thread of its own, so that a second signal or the time limit can end the wait."""
    result: list[bool] = []

    def stop() -> None:
        control.task.stop()
        control.task.join(1.0)
        control.close()
        result.append(service.stop())

    thread = threading.Thread(target=stop, name="stop", daemon=True)
    thread.start()
    until = time.monotonic() + _STOP_S
    while thread.is_alive() and len(heard) < _ENOUGH_SIGNALS and time.monotonic() < until:
        thread.join(0.1)
    return 0 if result == [True] else 3
