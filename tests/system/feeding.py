"""Both ends of a broker for tests: a sender of blocks made of the plain client library, and a node that listens."""

import dataclasses
import threading
import time
from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from types import TracebackType
from typing import Self

import numpy as np
from paho.mqtt import client as mqtt
from paho.mqtt.enums import CallbackAPIVersion

from humbell.model import Block, SampleUnit
from humbell.sources import MqttHub, MqttSettings, MqttSource
from humbell.wire import BrokerSettings, encode

START_NS = 1_772_359_200_000_000_000  # 2026-03-01T10:00:00Z
CLIENT_ID = "humbell-test"
WITHIN_S = 20.0  # generous: what takes a tenth of a second may take seconds on a loaded machine


def block(seq: int, source: str = "wifi-1", boot: str = "boot-1") -> Block:
    """Return one of the blocks of a stream; its samples tell its number."""
    samples = np.full((2, 4), seq, np.float32)
    return Block(source, boot, seq, START_NS + seq * 1_000_000, 4000.0, SampleUnit.G, samples)


def same(one: Block, other: Block) -> bool:
    """Return whether two blocks are the same to the last bit."""
    rest = dataclasses.replace(other, samples=one.samples)
    equal = all(getattr(one, f.name) == getattr(rest, f.name) for f in dataclasses.fields(one) if f.name != "samples")
    return equal and one.samples.dtype == other.samples.dtype and bool(np.array_equal(one.samples, other.samples))


class Sender:
    """
    Publishes blocks, and again where the broker was away.

    Args:
        port: of the broker.
    """

    def __init__(self, port: int) -> None:
        self._client = mqtt.Client(CallbackAPIVersion.VERSION2, "sender", protocol=mqtt.MQTTv5)
        self._client.max_inflight_messages_set(10)
        self._client.connect("127.0.0.1", port, clean_start=True)
        self._client.loop_start()
        self._sent: list[mqtt.MQTTMessageInfo] = []

    def __enter__(self) -> Self:
        """Return itself."""
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        """Disconnect."""
        self._client.disconnect()
        self._client.loop_stop()

    def send(self, *blocks: Block, topic: str | None = None, qos: int = 1, retain: bool = False) -> None:
        """Publish *blocks*, each on the topic of its source."""
        for one in blocks:
            self.send_bytes(topic or f"humbell/blocks/{one.source}", encode(one), qos=qos, retain=retain)

    def send_bytes(self, topic: str, payload: bytes, *, qos: int = 1, retain: bool = False) -> None:
        """Publish *payload*."""
        self._sent.append(self._client.publish(topic, payload, qos, retain))

    def flush(self) -> None:
        """Wait until the broker has taken everything."""
        give_up_s = time.monotonic() + WITHIN_S
        for one in self._sent:
            one.wait_for_publish(max(0.0, give_up_s - time.monotonic()))
            assert one.is_published(), "the broker has not taken all that was sent"
        self._sent.clear()


class Node:
    """
    A hub and its sources, each open.

    Args:
        brokers: settings, by name.

        sources: settings, by id; their broker is ``local``, and blocks of any age are taken.

        receive_maximum: messages that the broker may send ahead.

        environ: where secrets are looked up.
    """

    def __init__(
        self,
        brokers: Mapping[str, BrokerSettings],
        sources: Mapping[str, Mapping[str, object]],
        receive_maximum: int = 16,
        environ: Mapping[str, str] | None = None,
    ) -> None:
        self.events: list[tuple[str, dict[str, object]]] = []
        self._lock = threading.Lock()
        self.hub = MqttHub(brokers, CLIENT_ID, note=self.note, receive_maximum=receive_maximum, environ=environ or {})
        self.sources = {
            name: MqttSource(
                name,
                MqttSettings.model_validate({"kind": "mqtt", "broker": "local", "max_age_s": 0, **settings}),
                self.hub,
                note=self.note,
            )
            for name, settings in sources.items()
        }

    def note(self, event: str, /, **fields: object) -> None:
        """Keep an event."""
        with self._lock:
            self.events.append((event, fields))

    def told(self, event: str) -> list[dict[str, object]]:
        """Return the fields of all events of this name."""
        with self._lock:
            return [fields for name, fields in self.events if name == event]

    def ready(self) -> bool:
        """Return whether all links stand, with all that they were to subscribe to."""
        found = [source.health for source in self.sources.values()]
        return all(health is not None and health.ready for health in found)

    @property
    def trouble(self) -> str:
        """Why the link to the broker does not work; empty where it does."""
        health = self.hub.health("local")
        return (health.trouble or "") if health is not None else ""


@contextmanager
def listening(
    brokers: int | Mapping[str, BrokerSettings],
    sources: Mapping[str, Mapping[str, object]] | None = None,
    *,
    receive_maximum: int = 16,
    environ: Mapping[str, str] | None = None,
) -> Iterator[Node]:
    """Yield a node that listens to a broker, given by its port or its settings; by default with the source wifi-1."""
    if isinstance(brokers, int):
        brokers = {"local": BrokerSettings(host="127.0.0.1", port=brokers)}
    node = Node(brokers, sources or {"wifi-1": {}}, receive_maximum, environ)
    try:
        for source in node.sources.values():
            source.open()
        yield node
    finally:
        for source in node.sources.values():
            source.close()


def read(source: MqttSource, number: int) -> list[Block]:
    """Return the next *number* blocks, and fail when they do not come."""
    found: list[Block] = []
    give_up_s = time.monotonic() + WITHIN_S
    while len(found) < number:
        one = source.read(0.1)
        if one is not None:
            found.append(one)
        assert time.monotonic() < give_up_s, f"{len(found)} of {number} blocks came: {source.counters}"
    return found


def numbers(blocks: list[Block]) -> list[int]:
    """Return the sequence numbers of *blocks*, as their samples tell them too."""
    assert all((one.samples == one.seq).all() for one in blocks)
    return [one.seq for one in blocks]
