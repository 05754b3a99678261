import json
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from humbell.model import Block, ConfigError, SampleUnit
from humbell.sources import Continuity, Join, MqttSettings, MqttSource
from humbell.wire import encode
from system.brokers import Mosquitto, mosquitto, wait_for
from system.feeding import CLIENT_ID, START_NS, WITHIN_S, Sender, block, listening, numbers, read, same

TOPIC = "humbell/blocks/wifi-1"


@pytest.fixture
def broker(tmp_path: Path) -> Iterator[Mosquitto]:
    """A broker that lets everybody in."""
    with mosquitto(tmp_path / "broker") as running:
        yield running


@pytest.mark.parametrize("dtype", [np.int16, np.int32, np.float32, np.float64])
def test_blocks_arrive_as_they_were_sent(broker: Mosquitto, dtype: type[Any]) -> None:
    """Samples of each type, times, units and side values pass a real broker unchanged, in order."""
    random = np.random.default_rng(1)
    sent = [
        Block(
            *("wifi-1", "boot-1", seq, START_NS + seq * 250_000_000, 51_200.0, unit),
            samples=(random.standard_normal((4, 12_800)) * 1000).astype(dtype),
            piece=seq % 2 == 0,
            aux={"rpm": 1480.0 + seq, "temp_C": 41.5},
        )
        for seq, unit in enumerate(SampleUnit)
    ]
    with listening(broker.port) as node, Sender(broker.port) as sender:
        wait_for(node.ready, WITHIN_S, "subscribed")
        sender.send(*sent)
        for one, other in zip(read(node.sources["wifi-1"], len(sent)), sent, strict=True):
            assert same(one, other)
            assert not one.samples.flags.writeable


def test_the_full_scale_comes_from_the_settings(broker: Mosquitto) -> None:
    """Blocks do not carry it, and clipping shows only where it is known."""
    with listening(broker.port, {"wifi-1": {"full_scale": 80.0}}) as node, Sender(broker.port) as sender:
        wait_for(node.ready, WITHIN_S, "subscribed")
        sender.send(block(0))
        assert read(node.sources["wifi-1"], 1)[0].full_scale == 80.0


def test_small_devices_send_json(broker: Mosquitto) -> None:
    """The same block as text, on a topic of one's own."""
    text = {"v": 1, "seq": 3, "boot": "b", "t": START_NS, "fs": 100, "unit": "m/s2", "x": [[1, -2.5]]}
    with listening(broker.port, {"wifi-1": {"topic": "plant/pump 7/x"}}) as node, Sender(broker.port) as sender:
        wait_for(node.ready, WITHIN_S, "subscribed")
        sender.send_bytes("plant/pump 7/x", json.dumps(text).encode())
        (found,) = read(node.sources["wifi-1"], 1)
    np.testing.assert_array_equal(found.samples, [[1, -2.5]])
    assert (found.source, found.seq, found.unit) == ("wifi-1", 3, SampleUnit.METRES_PER_SECOND_SQUARED)


def test_several_sources_share_one_connection(broker: Mosquitto) -> None:
    """Each source gets its own blocks alone, and the broker sees one client."""
    names = [f"wifi-{number}" for number in range(5)]
    with listening(broker.port, {name: {} for name in names}) as node, Sender(broker.port) as sender:
        wait_for(node.ready, WITHIN_S, "subscribed")
        for seq in range(20):
            sender.send(*(block(seq, name) for name in names))
        for name in names:
            found = read(node.sources[name], 20)
            assert numbers(found) == list(range(20))
            assert {one.source for one in found} == {name}
    assert broker.log.count(f" as {CLIENT_ID} (") == 1


def test_two_sources_cannot_have_one_topic(broker: Mosquitto) -> None:
    """A block belongs to one source; and a source's broker must be there."""
    with listening(broker.port, {"wifi-1": {}}) as node:
        settings = MqttSettings(kind="mqtt", broker="local", topic=TOPIC)
        with pytest.raises(ConfigError, match=f"two sources have the topic {TOPIC} of broker local"):
            MqttSource("wifi-2", settings, node.hub, note=node.note)
        with pytest.raises(ConfigError, match=r"there is no broker remote .* known: local"):
            MqttSource("wifi-3", MqttSettings(kind="mqtt", broker="remote"), node.hub, note=node.note)


def test_a_sender_that_restarts_goes_on(broker: Mosquitto) -> None:
    """A new boot id counts from the beginning again; what it has sent already is known under the old one."""
    with listening(broker.port) as node, Sender(broker.port) as sender:
        wait_for(node.ready, WITHIN_S, "subscribed")
        sender.send(*(block(seq) for seq in range(3)), *(block(seq, boot="boot-2") for seq in range(3)), block(1))
        sender.flush()
        source = node.sources["wifi-1"]
        found = read(source, 6)
        assert [(one.boot, one.seq) for one in found] == [(f"boot-{run}", seq) for run in (1, 2) for seq in range(3)]
        assert source.read(0.1) is None
        continuity = Continuity()
        assert [continuity.feed(one).join for one in found].count(Join.RESTART) == 1
        assert source.counters.dropped == {"duplicate": 1}


def test_repetitions_are_dropped_counted_and_acknowledged(broker: Mosquitto) -> None:
    """More repetitions than the broker sends ahead do not stop the flow, and none is measured."""
    with listening(broker.port, receive_maximum=4) as node, Sender(broker.port) as sender:
        wait_for(node.ready, WITHIN_S, "subscribed")
        sender.send(block(0), *[block(1)] * 30, block(2), block(0))
        source = node.sources["wifi-1"]
        assert numbers(read(source, 3)) == [0, 1, 2]
        wait_for(lambda: source.read(0.0) is None and source.counters.received == 33, WITHIN_S, "all came")
        assert source.counters.dropped == {"duplicate": 30}
        assert source.counters.balanced
        assert [one["reason"] for one in node.told("block_dropped")] == ["duplicate"]


def test_a_retained_block_is_dropped_and_counted(broker: Mosquitto) -> None:
    """Nobody knows how old it is. A live block with the same flag, of a careless sender, is measured."""
    with Sender(broker.port) as sender:
        sender.send(block(0), retain=True)
        sender.flush()
        with listening(broker.port) as node:
            wait_for(node.ready, WITHIN_S, "subscribed")
            sender.send(block(1), retain=True)
            source = node.sources["wifi-1"]
            assert numbers(read(source, 1)) == [1]
            assert source.counters.dropped == {"retained": 1}
            assert source.counters.balanced


def test_what_breaks_a_rule_is_dropped_counted_and_told_once(broker: Mosquitto) -> None:
    """Refused whole, by reason; the flow goes on, and the log is not filled."""
    with listening(broker.port, {"wifi-1": {"rate_hz": 4000, "unit": "g"}}) as node, Sender(broker.port) as sender:
        wait_for(node.ready, WITHIN_S, "subscribed")
        for _ in range(5):
            sender.send_bytes(TOPIC, b"no block")
            sender.send_bytes(TOPIC, encode(block(0)).replace(b"\x61g", b"\x61q"))
            sender.send_bytes(TOPIC, encode(block(0)) + b"\x00")
        sender.send_bytes(TOPIC, b"\x00" * (8 * 2**20 + 1))
        sender.send(Block("wifi-1", "b", 0, START_NS, 8000.0, SampleUnit.G, np.zeros((1, 4))))
        sender.send(Block("wifi-1", "b", 0, START_NS, 4000.0, SampleUnit.VOLT, np.zeros((1, 4))))
        sender.send(block(7))
        source = node.sources["wifi-1"]
        assert numbers(read(source, 1)) == [7]
        expected = {"no_cbor": 5, "unit": 5, "trailing": 5, "too_large": 1, "other_rate": 1, "other_unit": 1}
        assert source.counters.dropped == expected
        assert source.counters.balanced
        assert [one["reason"] for one in node.told("block_dropped")] == list(expected)


def test_what_was_sent_while_we_were_away_comes_when_we_are_back(broker: Mosquitto) -> None:
    """The broker keeps the session over a restart of ours, and what is in our own queue is read before we leave."""
    with Sender(broker.port) as sender:
        with listening(broker.port) as node:
            wait_for(node.ready, WITHIN_S, "subscribed")
            sender.send(*(block(seq) for seq in range(5)))
            assert numbers(read(node.sources["wifi-1"], 5)) == list(range(5))
        sender.send(*(block(seq) for seq in range(5, 60)))
        sender.flush()
        with listening(broker.port) as node:
            assert numbers(read(node.sources["wifi-1"], 55)) == list(range(5, 60))


def test_a_topic_of_an_earlier_configuration_is_left(broker: Mosquitto) -> None:
    """What comes for a source that is no more is acknowledged and counted, and the broker is told to stop."""
    with Sender(broker.port) as sender:
        with listening(broker.port, {"wifi-1": {}, "wifi-2": {}}) as node:
            wait_for(node.ready, WITHIN_S, "subscribed")
        sender.send(*(block(seq, "wifi-2") for seq in range(40)))
        sender.flush()
        with listening(broker.port, {"wifi-1": {}}, receive_maximum=4) as node:
            wait_for(lambda: node.hub.unclaimed("local") == 40, WITHIN_S, "what was kept for it came")
            sender.send(*(block(seq, "wifi-2") for seq in range(40, 50)), block(0))
            sender.flush()
            assert numbers(read(node.sources["wifi-1"], 1)) == [0]
            assert node.hub.unclaimed("local") == 40
    assert f"{CLIENT_ID} humbell/blocks/wifi-2" in broker.log


def test_a_full_queue_keeps_the_broker_waiting_and_loses_nothing(broker: Mosquitto) -> None:
    """While nobody reads, only what is in the queue is acknowledged, and the broker keeps the rest."""
    with (
        listening(broker.port, {"wifi-1": {"queue_blocks": 5}}, receive_maximum=4) as node,
        Sender(broker.port) as sender,
    ):
        wait_for(node.ready, WITHIN_S, "subscribed")
        sender.send(*(block(seq) for seq in range(100)))
        sender.flush()
        source = node.sources["wifi-1"]
        wait_for(lambda: source.counters.held >= 4, WITHIN_S, "the queue is full")
        assert (source.counters.received, source.counters.queued) == (5, 5)
        assert broker.log.count(f"Received PUBACK from {CLIENT_ID}") <= 5
        assert numbers(read(source, 100)) == list(range(100))
        assert source.counters.dropped == {}
        assert (source.counters.received, source.counters.queued, source.counters.held) == (100, 0, 0)


def test_a_broker_that_sends_too_much_has_to_wait(broker: Mosquitto, monkeypatch: pytest.MonkeyPatch) -> None:
    """What can be held is bounded; beyond it nothing is read from the broker until there is room."""
    monkeypatch.setattr("humbell.sources.mqtt.HELD_MESSAGES", 2)
    with (
        listening(broker.port, {"wifi-1": {"queue_blocks": 5}}, receive_maximum=4) as node,
        Sender(broker.port) as sender,
    ):
        wait_for(node.ready, WITHIN_S, "subscribed")
        sender.send(*(block(seq) for seq in range(200)))
        sender.flush()
        source = node.sources["wifi-1"]
        wait_for(lambda: source.counters.held == 2, WITHIN_S, "there is no room")
        assert numbers(read(source, 200)) == list(range(200))
        assert source.counters.dropped == {}
        assert len(node.told("mqtt_connected")) == 1


def test_a_broker_that_has_to_wait_too_long_is_left(broker: Mosquitto, monkeypatch: pytest.MonkeyPatch) -> None:
    """It would take us for dead; so the connection is given up, that is told, and everything comes again."""
    monkeypatch.setattr("humbell.sources.mqtt.HELD_MESSAGES", 2)
    monkeypatch.setattr("humbell.wire.session.FULL_S", 0.1)
    with (
        listening(broker.port, {"wifi-1": {"queue_blocks": 5}}, receive_maximum=4) as node,
        Sender(broker.port) as sender,
    ):
        wait_for(node.ready, WITHIN_S, "subscribed")
        sender.send(*(block(seq) for seq in range(50)))
        sender.flush()
        source = node.sources["wifi-1"]
        wait_for(lambda: "faster than they are measured" in node.trouble, WITHIN_S, "the connection was given up")
        assert numbers(read(source, 50)) == list(range(50))
        assert set(source.counters.dropped) <= {"duplicate"}
        assert node.told("mqtt_callback_failed") == []


def test_what_cannot_wait_at_the_broker_is_counted(broker: Mosquitto) -> None:
    """A message of QoS 0 that finds the queue full is lost, and that shows."""
    with listening(broker.port, {"wifi-1": {"queue_blocks": 5}}) as node, Sender(broker.port) as sender:
        wait_for(node.ready, WITHIN_S, "subscribed")
        sender.send(*(block(seq) for seq in range(20)), qos=0)
        source = node.sources["wifi-1"]
        wait_for(lambda: source.counters.received == 20, WITHIN_S, "all came")
        assert source.counters.dropped == {"queue_full": 15}
        assert source.counters.held == 0
        assert numbers(read(source, 5)) == list(range(5))
        assert source.counters.balanced
