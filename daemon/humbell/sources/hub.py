"""The links to the brokers that sources listen to: one for each broker, shared by all sources that name it."""

import os
import threading
from collections.abc import Mapping
from typing import Protocol

from humbell.model import ConfigError
from humbell.wire import BrokerSettings, LinkHealth, Message, MqttLink, Note
from humbell.wire.mqtt import RECEIVE_MAXIMUM, SESSION_EXPIRY_S


class Receiver(Protocol):
    """Takes the messages of one topic, in the thread of the link: it must not wait."""

    def receive(self, message: Message) -> None:
        """
        Take *message*, and see to it that it is acknowledged.

        Raises:
            NoRoomError: it is to come again later.
        """


class MqttHub:
    """
    Hands the messages of each topic to its receiver.

    A link runs while at least one of its topics is open. Receivers claim their topics before the first is opened,
    because a broker that kept the session sends what it has for any of them at once. What comes on a topic that nobody
    has claimed (an earlier configuration had it) is acknowledged, counted, and unsubscribed from.

    A receiver that keeps messages unacknowledged holds up the others of its broker when it has as many as the broker
    may send ahead.

    Args:
        brokers: settings, by name.

        client_id: the session's name at every broker; no two nodes may share one.

        note: takes events for the log.

        environ: where secrets are looked up.

        session_expiry_s: for how long brokers keep what we miss.

        receive_maximum: messages that a broker may send ahead of our acknowledgements.
    """

    def __init__(
        self,
        brokers: Mapping[str, BrokerSettings],
        client_id: str,
        *,
        note: Note,
        environ: Mapping[str, str] = os.environ,
        session_expiry_s: int = SESSION_EXPIRY_S,
        receive_maximum: int = RECEIVE_MAXIMUM,
    ) -> None:
        self._brokers = brokers
        self._client_id = client_id
        self._note = note
        self._environ = environ
        self._session_expiry_s = session_expiry_s
        self._receive_maximum = receive_maximum
        self._lock = threading.Lock()
        self._lines: dict[str, _Line] = {}

    def claim(self, broker: str, topic: str, receiver: Receiver) -> None:
        """
        Have *receiver* get the messages of *topic*.

        Raises:
            ConfigError: there is no such broker, or the topic has a receiver.
        """
        with self._lock:
            if broker not in self._brokers:
                known = ", ".join(sorted(self._brokers)) or "none"
                raise ConfigError(f"there is no broker {broker} (add it under brokers; known: {known})")
            line = self._lines.setdefault(broker, _Line())
            if topic in line.receivers:
                raise ConfigError(f"two sources have the topic {topic} of broker {broker} (give each its own)")
            line.receivers[topic] = receiver

    def open(self, broker: str, topic: str) -> None:
        """Listen to *topic*, which was claimed, from now on; returns at once."""
        with self._lock:
            line = self._lines[broker]
            line.open.add(topic)
            if line.link is None:
                line.link = self._make(broker, line)
                line.link.subscribe(line.receivers)
                line.link.start()

    def close(self, broker: str, topic: str) -> None:
        """Listen to *topic* no more. The last one of a broker ends the link, and the broker keeps the session."""
        with self._lock:
            line = self._lines[broker]
            line.open.discard(topic)
            if line.open or line.link is None:
                return
            link, line.link = line.link, None
        self._end(broker, link)

    def stop(self) -> None:
        """End all links: nothing more is received or acknowledged, while what is queued can still be read."""
        with self._lock:
            links = {broker: line.link for broker, line in self._lines.items() if line.link is not None}
            for line in self._lines.values():
                line.link = None
        for broker, link in links.items():
            self._end(broker, link)

    def ack(self, broker: str, message: Message) -> None:
        """Acknowledge *message*."""
        link = self._lines[broker].link
        if link is not None:
            link.ack(message)

    def broken(self, broker: str) -> bool:
        """Return whether the thread of the link to *broker* has ended though nobody asked it to."""
        link = self._lines[broker].link
        return link is not None and not link.alive

    def health(self, broker: str) -> LinkHealth | None:
        """Return how the link to *broker* is doing; None where there is none."""
        line = self._lines.get(broker)
        return line.link.health if line is not None and line.link is not None else None

    def link(self, broker: str) -> MqttLink | None:
        """Return the link to *broker*; None where there is none."""
        line = self._lines.get(broker)
        return line.link if line is not None else None

    def unclaimed(self, broker: str) -> int:
        """Return how many messages came on topics that nobody has claimed."""
        line = self._lines.get(broker)
        return line.unclaimed if line is not None else 0

    def _end(self, broker: str, link: MqttLink) -> None:
        if not link.stop():
            self._note("mqtt_still_connecting", broker=broker)

    def _make(self, broker: str, line: "_Line") -> MqttLink:
        def receive(message: Message) -> None:
            receiver = line.receivers.get(message.topic)
            if receiver is not None:
                receiver.receive(message)
                return
            line.unclaimed += 1
            self._note("mqtt_unclaimed", broker=broker, topic=message.topic, count=line.unclaimed)
            link.unsubscribe([message.topic])
            link.ack(message)

        link = MqttLink(
            broker,
            self._brokers[broker],
            self._client_id,
            note=self._note,
            receive=receive,
            environ=self._environ,
            session_expiry_s=self._session_expiry_s,
            receive_maximum=self._receive_maximum,
        )
        return link


class _Line:
    def __init__(self) -> None:
        self.receivers: dict[str, Receiver] = {}
        self.open: set[str] = set()
        self.link: MqttLink | None = None
        self.unclaimed = 0
