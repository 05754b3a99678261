"""The control socket: one JSON object a line in, one out, for the command line on the same computer."""

import errno
import json
import os
import socket
import stat
from collections.abc import Callable, Mapping
from pathlib import Path
from typing import Any

import structlog

from humbell.app.task import Task
from humbell.model import ConfigError, OutOfReachError

_log = structlog.get_logger()
_TURN_S = 0.5
# A client that says nothing must not keep others waiting.
_CLIENT_S = 5.0
_MAX_BYTES = 64 * 1024
# What the kernel allows for a path in an address, with the zero at its end.
_MAX_PATH = 107
# What may pass without a change of the configuration: a disk that is full or away.
_MAY_PASS = {errno.ENOSPC, errno.EDQUOT, errno.EROFS, errno.EIO}
# Owner and group: whoever may acknowledge alarms is in the group of the service.
_MODE = stat.S_IRUSR | stat.S_IWUSR | stat.S_IRGRP | stat.S_IWGRP

Handle = Callable[[Mapping[str, Any]], Mapping[str, Any]]


def socket_path(journal: Path) -> Path:
    """Return where the socket of the service with that *journal* is: beside it."""
    return journal.with_name("control.sock")


class Control:
    """
    Answers requests.

    Args:
        path: of the socket.

        handle: makes an answer of a request; called in this task.

    Raises:
        ConfigError: another service listens there, or there can be no socket.

        OutOfReachError: the disk is full or away.
    """

    def __init__(self, path: Path, handle: Handle) -> None:
        self._path = path
        self._handle = handle
        self._socket = _listen(path)
        self.task = Task("control", self._turn)

    def close(self) -> None:
        """Take the socket away."""
        self._socket.close()
        self._path.unlink(missing_ok=True)

    def _turn(self) -> bool:
        try:
            client, _ = self._socket.accept()
        except TimeoutError:
            return True
        with client:
            client.settimeout(_CLIENT_S)
            try:
                self._answer(client)
            except (OSError, TimeoutError) as error:
                _log.info("control_client_lost", why=str(error))
        return True

    def _answer(self, client: socket.socket) -> None:
        line = b""
        while not line.endswith(b"\n"):
            part = client.recv(_MAX_BYTES)
            line += part
            if not part or len(line) > _MAX_BYTES:
                return
        try:
            request = json.loads(line)
        except ValueError:
            request = None
        answer: Mapping[str, Any] = {"error": "the request is no JSON object"}
        if isinstance(request, dict):
            try:
                answer = self._handle(request)
            except (KeyError, TypeError, ValueError) as error:
                answer = {"error": f"the request cannot be used: {error!r}"}
        client.sendall(json.dumps(answer).encode() + b"\n")


def ask(path: Path, request: Mapping[str, Any], timeout_s: float = 10.0) -> Mapping[str, Any]:
    """
    Return what the running service answers to *request*.

    Raises:
        OutOfReachError: no service runs there, it does not answer, or we may not ask.
    """
    with socket.socket(socket.AF_UNIX, socket.SOCK_STREAM) as client:
        client.settimeout(timeout_s)
        try:
            client.connect(str(path))
            client.sendall(json.dumps(request).encode() + b"\n")
            with client.makefile("rb") as stream:
                answer = json.loads(stream.readline())
        except (FileNotFoundError, ConnectionRefusedError):
            raise OutOfReachError(f"{path}: no service runs here (start it: humbell run CONFIG)") from None
        except PermissionError:
            raise OutOfReachError(f"{path}: you may not ask the service (join the group of the socket)") from None
        except (OSError, ValueError) as error:
            raise OutOfReachError(f"{path}: the service does not answer: {error} (see its log)") from None
    if not isinstance(answer, dict):
        raise OutOfReachError(f"{path}: the service gave no answer that can be read (is it of another version?)")
    return answer


def _listen(path: Path) -> socket.socket:
    if len(os.fsencode(path)) > _MAX_PATH:
        raise ConfigError(f"{path}: is too long for a socket, {_MAX_PATH} bytes at most (move journal.path)")
    listener = socket.socket(socket.AF_UNIX, socket.SOCK_STREAM)
    listener.settimeout(_TURN_S)
    try:
        path.parent.mkdir(parents=True, exist_ok=True)
        if _is_answered(path):
            raise FileExistsError(errno.EADDRINUSE, "another humbell runs with this journal")
        path.unlink(missing_ok=True)
        listener.bind(str(path))
        path.chmod(_MODE)
        listener.listen()
    except OSError as error:
        listener.close()
        if error.errno in _MAY_PASS:
            raise OutOfReachError(f"{path}: there can be no socket: {error.strerror} (check space and disk)") from None
        raise ConfigError(
            f"{path}: there can be no socket: {error.strerror} (stop the other one, or check the folder's rights)"
        ) from None
    return listener


def _is_answered(path: Path) -> bool:
    with socket.socket(socket.AF_UNIX, socket.SOCK_STREAM) as probe:
        probe.settimeout(_TURN_S)
        return probe.connect_ex(str(path)) == 0
