import socket
import threading
import time
from collections.abc import Callable, Iterator
from pathlib import Path

import pytest

from humbell.model import OutOfReachError
from humbell.sources import MqttSource
from humbell.wire import BrokerSettings, Message, MqttLink
from humbell.wire.connection import Connection
from system.brokers import Mosquitto, mosquitto, wait_for
from system.feeding import CLIENT_ID, WITHIN_S, Node, Sender, block, listening, numbers, read

REBUILT_S = 10.0  # fault matrix, row 1

Figure = Callable[[str, str], None]


@pytest.fixture
def broker(tmp_path: Path) -> Iterator[Mosquitto]:
    """A broker that lets everybody in."""
    with mosquitto(tmp_path / "broker") as running:
        yield running


class Fault:
    """
    An exception in a function: once, when it is next called after the fault was armed.

    Args:
        owner: class that has the function.

        name: of the function.

        monkeypatch: puts it back.
    """

    def __init__(self, owner: type, name: str, monkeypatch: pytest.MonkeyPatch) -> None:
        self._armed = threading.Event()
        self.raised = threading.Event()
        function = getattr(owner, name)

        def failing(*args: object, **fields: object) -> object:
            if self._armed.is_set() and not self.raised.is_set():
                self.raised.set()
                raise ZeroDivisionError("made by the test")
            return function(*args, **fields)

        monkeypatch.setattr(owner, name, failing)

    def arm(self) -> None:
        """Have it happen."""
        self._armed.set()


# What has the callback, its name, and whether it is called when a connection ends or begins.
CALLBACKS = [
    (Connection, "on_connect", True),
    (Connection, "on_disconnect", True),
    (Connection, "on_log", False),
    (Connection, "on_message", False),
    (Connection, "on_publish", False),
    (Connection, "on_subscribe", True),
    (MqttSource, "receive", False),
    (Node, "note", True),
]


@pytest.mark.parametrize(("owner", "name", "reconnects"), CALLBACKS)
def test_an_exception_in_a_callback_costs_neither_the_link_nor_a_block(
    broker: Mosquitto, monkeypatch: pytest.MonkeyPatch, figure: Figure, owner: type, name: str, *, reconnects: bool
) -> None:
    """Each callback of the client library and of ours fails once; the client is made anew, and all blocks come once."""
    fault = Fault(owner, name, monkeypatch)
    with listening(broker.port) as node, Sender(broker.port) as sender:
        source = node.sources["wifi-1"]
        wait_for(node.ready, WITHIN_S, "subscribed")
        sender.send(*(block(seq) for seq in range(10)))
        assert numbers(read(source, 5)) == list(range(5))
        fault.arm()
        if reconnects:
            broker.stop()
            broker.start()
        if name == "on_publish":
            _publish(node)
        sender.send(*(block(seq) for seq in range(10, 20)))
        wait_for(fault.raised.is_set, WITHIN_S, "the callback has failed")
        rebuilt_s = wait_for(lambda: _failures(node) and node.ready(), REBUILT_S, "a new client stands")
        assert numbers(read(source, 15)) == list(range(5, 20))
        assert set(source.counters.dropped) <= {"duplicate"}
        assert source.counters.balanced
    figure(f"MQTT, exception in {owner.__name__}.{name}", f"up again in {rebuilt_s:.2f} s, 0 of 20 blocks lost")


def _publish(node: Node) -> None:
    link = node.hub.link("local")
    assert link is not None
    link.publish("elsewhere", b"x")


def _failures(node: Node) -> int:
    health = node.hub.health("local")
    return health.failures if health is not None else 0


def test_a_callback_that_always_fails_is_tried_again_and_again(
    broker: Mosquitto, monkeypatch: pytest.MonkeyPatch
) -> None:
    """The link says what is wrong, stays alive, and works as soon as the fault is gone; nothing is lost meanwhile."""
    receive = MqttSource.receive

    def broken(_source: MqttSource, _message: Message) -> None:
        raise ZeroDivisionError("made by the test")

    monkeypatch.setattr(MqttSource, "receive", broken)
    with listening(broker.port) as node, Sender(broker.port) as sender:
        wait_for(node.ready, WITHIN_S, "subscribed")
        sender.send(*(block(seq) for seq in range(10)))
        wait_for(lambda: _failures(node) >= 2, WITHIN_S, "it failed twice")
        expected = "brokers.local: a fault of this program in receive: ZeroDivisionError: made by the test"
        wait_for(lambda: node.trouble.startswith(expected), WITHIN_S, "the trouble is told")
        monkeypatch.setattr(MqttSource, "receive", receive)
        assert numbers(read(node.sources["wifi-1"], 10)) == list(range(10))
        assert node.trouble == ""


def test_a_broker_that_was_killed_comes_back_with_what_it_had(broker: Mosquitto, figure: Figure) -> None:
    """What was acknowledged is not measured twice; what was not comes again; what was sent meanwhile comes too."""
    with (
        listening(broker.port, {"wifi-1": {"queue_blocks": 4}}, receive_maximum=4) as node,
        Sender(broker.port) as sender,
    ):
        source = node.sources["wifi-1"]
        wait_for(node.ready, WITHIN_S, "subscribed")
        sender.send(*(block(seq) for seq in range(40)))
        sender.flush()
        wait_for(lambda: source.counters.held >= 4, WITHIN_S, "the queue is full")
        broker.store()
        broker.kill()
        wait_for(lambda: node.trouble, WITHIN_S, "the loss is noticed")
        assert not node.ready()
        sender.send(*(block(seq) for seq in range(40, 50)))
        broker.start()
        recovered_s = wait_for(node.ready, WITHIN_S, "connected again")
        assert node.trouble == ""
        assert numbers(read(source, 50)) == list(range(50))
        wait_for(lambda: source.read(0.0) is None and not source.counters.queued, WITHIN_S, "all came")
        assert set(source.counters.dropped) <= {"duplicate"}
        assert source.counters.balanced
    figure("MQTT broker killed and restarted", f"up again in {recovered_s:.2f} s, 0 of 50 blocks lost, 0 twice")


def test_what_came_in_is_not_lost_with_the_memory_of_the_broker(broker: Mosquitto) -> None:
    """A broker that forgets everything cannot send again what we hold; so it is held over the lost connection."""
    with listening(broker.port, {"wifi-1": {"queue_blocks": 4}}) as node, Sender(broker.port) as sender:
        source = node.sources["wifi-1"]
        wait_for(node.ready, WITHIN_S, "subscribed")
        sender.send(*(block(seq) for seq in range(12)))
        sender.flush()
        wait_for(lambda: source.counters.held == 8, WITHIN_S, "the queue is full")
        broker.kill()
        broker.start()
        wait_for(lambda: len(node.told("mqtt_connected")) == 2 and node.ready(), WITHIN_S, "connected again")
        assert node.told("mqtt_connected")[1]["session_present"] is False
        sender.send(block(12))
        assert numbers(read(source, 13)) == list(range(13))


def test_a_broker_that_hangs_is_found_by_its_silence(broker: Mosquitto, figure: Figure) -> None:
    """The connection looks open all the time; when nothing comes back within twice the keep-alive time, it is lost."""
    settings = BrokerSettings(host="127.0.0.1", port=broker.port, keepalive_s=1)
    with listening({"local": settings}) as node, Sender(broker.port) as sender:
        wait_for(node.ready, WITHIN_S, "subscribed")
        broker.freeze()
        try:
            found_s = wait_for(lambda: node.trouble, WITHIN_S, "the silence is noticed")
            assert "no sign of life within" in node.trouble
        finally:
            broker.thaw()
        sender.send(block(0))
        assert numbers(read(node.sources["wifi-1"], 1)) == [0]
    figure("MQTT broker frozen, keep-alive 1 s", f"found in {found_s:.1f} s")


@pytest.mark.slow
def test_a_peer_that_never_answers_is_given_up(figure: Figure) -> None:
    """Something accepts the connection and keeps silent: the deadline for the answer is 5 s (fault matrix: 15 s)."""
    with socket.create_server(("127.0.0.1", 0)) as peer, listening(peer.getsockname()[1]) as node:
        found_s = wait_for(lambda: node.trouble, 15.0, "the deadline fires")
        assert "no answer within 5 s (look at the network, then at the broker)" in node.trouble
    figure("MQTT peer that never answers", f"given up after {found_s:.1f} s")


@pytest.mark.parametrize("state", ["away", "silent", "working"])
def test_closing_is_bounded_whatever_the_broker_does(broker: Mosquitto, state: str) -> None:
    """A stop waits for nobody: not for a broker that is away, and not for one that hangs."""
    with listening(broker.port) as node:
        wait_for(node.ready, WITHIN_S, "subscribed")
        if state == "away":
            broker.kill()
            wait_for(lambda: node.trouble, WITHIN_S, "the loss is noticed")
        if state == "silent":
            broker.freeze()
        began_s = time.monotonic()
        node.sources["wifi-1"].close()
        took_s = time.monotonic() - began_s
        if state == "silent":
            broker.thaw()
    assert took_s < 3.0
    assert not [thread for thread in threading.enumerate() if thread.name.startswith("mqtt ")]


@pytest.mark.slow
def test_two_nodes_with_one_id_do_not_chase_each_other(broker: Mosquitto) -> None:
    """After a few times one of them says what it may be, and comes back half a minute later at the earliest."""
    with listening(broker.port) as first, listening(broker.port) as second:
        advice = f"look whether another client has the same id, {CLIENT_ID}"
        wait_for(lambda: advice in first.trouble + second.trouble, 3 * WITHIN_S, "it is told")
        wait_for(lambda: first.ready() or second.ready(), WITHIN_S, "the other works")
        before = len(first.told("mqtt_connected") + second.told("mqtt_connected"))
        time.sleep(10.0)
        assert len(first.told("mqtt_connected") + second.told("mqtt_connected")) == before


def _silent(_event: str, /, **_fields: object) -> None:
    pass


def test_messages_of_ours_are_confirmed_or_fail(broker: Mosquitto) -> None:
    """Done means that the broker has it; without a connection nothing is taken, and what was under way fails."""
    came: list[Message] = []
    settings = BrokerSettings(host="127.0.0.1", port=broker.port)
    link = MqttLink("local", settings, "humbell-out", note=_silent, receive=came.append)
    with pytest.raises(OutOfReachError, match=r"brokers\.local: not connected yet"):
        link.publish("a/b", b"x")
    link.subscribe(["a/b"])
    link.start()
    try:
        wait_for(lambda: link.health.ready, WITHIN_S, "connected")
        sent = [link.publish("a/b", bytes([number])) for number in range(200)]
        for one in sent:
            one.result(WITHIN_S)
        wait_for(lambda: len(came) >= 16, WITHIN_S, "they came back")
        assert [one.payload for one in came[:16]] == [bytes([number]) for number in range(16)]
        broker.freeze()
        waiting = link.publish("a/b", b"y")
        broker.kill()
        with pytest.raises(OutOfReachError):
            waiting.result(WITHIN_S)
        with pytest.raises(OutOfReachError, match=r"brokers\.local: "):
            link.publish("a/b", b"z")
    finally:
        assert link.stop()
