"""The control socket: one line in, one line out; whoever sends nonsense, or nothing, holds up nobody."""

import json
import socket
import stat
import threading
from collections.abc import Iterator, Mapping
from contextlib import contextmanager, suppress
from pathlib import Path
from typing import Any

import pytest
from structlog.testing import capture_logs

from humbell.app import control as module
from humbell.app.control import Control, ask, socket_path
from humbell.model import ConfigError, OutOfReachError

PATIENCE_S = 5.0


def echo(request: Mapping[str, Any]) -> Mapping[str, Any]:
    """Answer with the request; refuse as the service does."""
    if request.get("ask") == "nonsense":
        raise ValueError("'nonsense' is not known")
    return {"asked": request["ask"], "more": request.get("more")}


@contextmanager
def listening(path: Path) -> Iterator[Control]:
    """Yield a control that answers at *path*."""
    control = Control(path, echo)
    control.task.start()
    try:
        yield control
    finally:
        control.task.stop()
        assert control.task.join(PATIENCE_S)
        control.close()


def say(path: Path, data: bytes) -> bytes:
    """Send *data* as it is, and return all that comes back."""
    with socket.socket(socket.AF_UNIX, socket.SOCK_STREAM) as client:
        client.settimeout(PATIENCE_S)
        client.connect(str(path))
        client.sendall(data)
        client.shutdown(socket.SHUT_WR)
        return b"".join(iter(lambda: client.recv(4096), b""))


def test_the_socket_lies_beside_the_journal() -> None:
    """Who knows the configuration finds it."""
    assert socket_path(Path("/var/lib/humbell/journal.db")) == Path("/var/lib/humbell/control.sock")


def test_a_question_gets_its_answer(tmp_path: Path) -> None:
    """Whatever is in it, as often as it is asked."""
    path = tmp_path / "state" / "control.sock"
    with listening(path):
        assert ask(path, {"ask": "status"}) == {"asked": "status", "more": None}
        long = "schöner Ton " * 1000
        assert ask(path, {"ask": "status", "more": long}) == {"asked": "status", "more": long}
    assert not path.exists()


def test_only_owner_and_group_may_ask(tmp_path: Path) -> None:
    """Acknowledging an alarm is a deed that not everybody on the computer may do."""
    path = tmp_path / "control.sock"
    with listening(path):
        assert stat.S_IMODE(path.stat().st_mode) == 0o660


@pytest.mark.parametrize(
    ("data", "said"),
    [
        (b"what?\n", "the request is no JSON object"),
        (b"[1, 2]\n", "the request is no JSON object"),
        (b"\xff\xfe\n", "the request is no JSON object"),
        (b"{}\n", "the request cannot be used: KeyError('ask')"),
        (b'{"ask": "nonsense"}\n', "the request cannot be used: ValueError(\"'nonsense' is not known\")"),
    ],
)
def test_nonsense_is_answered_and_stops_nothing(tmp_path: Path, data: bytes, said: str) -> None:
    """The next one is served as ever, and no task has failed."""
    path = tmp_path / "control.sock"
    with listening(path) as control:
        assert json.loads(say(path, data)) == {"error": said}
        assert ask(path, {"ask": "status"})["asked"] == "status"
        assert control.task.errors == 0


@pytest.mark.parametrize("data", [b"", b'{"ask": "status"}', b"x" * 70_000])
def test_a_request_without_an_end_gets_no_answer(tmp_path: Path, data: bytes) -> None:
    """Nor does one that never ends take all memory."""
    path = tmp_path / "control.sock"
    with capture_logs(), listening(path) as control:
        # What was not read is thrown away with the connection.
        with suppress(ConnectionError):
            assert say(path, data) == b""
        assert ask(path, {"ask": "status"})["asked"] == "status"
        assert control.task.errors == 0


def test_a_client_that_says_nothing_is_given_up(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Others wait no longer for it than a moment."""
    monkeypatch.setattr(module, "_CLIENT_S", 0.05)
    path = tmp_path / "control.sock"
    with (
        capture_logs() as logs,
        listening(path),
        socket.socket(socket.AF_UNIX, socket.SOCK_STREAM) as silent,
    ):
        silent.connect(str(path))
        assert ask(path, {"ask": "status"})["asked"] == "status"
    assert [one["event"] for one in logs] == ["control_client_lost"]


def test_two_cannot_listen_at_one_place(tmp_path: Path) -> None:
    """The second is told so, and the first goes on."""
    path = tmp_path / "control.sock"
    with listening(path):
        with pytest.raises(ConfigError, match="another humbell runs with this journal"):
            Control(path, echo)
        assert ask(path, {"ask": "status"})["asked"] == "status"


def test_what_a_killed_service_left_is_replaced(tmp_path: Path) -> None:
    """A socket at which nobody answers is no other service."""
    path = tmp_path / "control.sock"
    with socket.socket(socket.AF_UNIX, socket.SOCK_STREAM) as dead:
        dead.bind(str(path))
    with pytest.raises(OutOfReachError, match="no service runs here"):
        ask(path, {"ask": "status"})
    with listening(path):
        assert ask(path, {"ask": "status"})["asked"] == "status"


def test_a_path_too_long_for_a_socket_is_refused(tmp_path: Path) -> None:
    """The kernel's own message would tell nobody what to do."""
    with pytest.raises(ConfigError, match=r"is too long for a socket, 107 bytes at most \(move journal.path\)"):
        Control(tmp_path / ("x" * 120), echo)


@pytest.mark.parametrize(("answer", "said"), [(b"", "does not answer"), (b"[]\n", "gave no answer that can be read")])
def test_an_answer_that_is_none_is_told(tmp_path: Path, answer: bytes, said: str) -> None:
    """A service of another version, or one that was killed meanwhile."""
    path = tmp_path / "control.sock"
    with socket.socket(socket.AF_UNIX, socket.SOCK_STREAM) as server:
        server.bind(str(path))
        server.listen()

        def reply() -> None:
            peer, _ = server.accept()
            with peer:
                peer.recv(4096)
                peer.sendall(answer)

        thread = threading.Thread(target=reply)
        thread.start()
        with pytest.raises(OutOfReachError, match=said):
            ask(path, {"ask": "status"}, timeout_s=PATIENCE_S)
        thread.join(PATIENCE_S)


def test_a_service_that_hangs_is_waited_for_only_so_long(tmp_path: Path) -> None:
    """Nobody sits before a command that never ends."""
    path = tmp_path / "control.sock"
    with socket.socket(socket.AF_UNIX, socket.SOCK_STREAM) as server:
        server.bind(str(path))
        server.listen()
        with pytest.raises(OutOfReachError, match="does not answer"):
            ask(path, {"ask": "status"}, timeout_s=0.05)
