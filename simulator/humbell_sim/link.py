"""One MQTT 5 connection as a sender sees it: transport only. What it leaves unconfirmed is the sender's to keep."""

import select
import ssl
from collections.abc import Callable
from dataclasses import dataclass, field

from paho.mqtt import client as mqtt
from paho.mqtt.enums import CallbackAPIVersion, MQTTErrorCode
from paho.mqtt.properties import Properties
from paho.mqtt.reasoncodes import ReasonCode

from humbell.model import ConfigError, OutOfReachError
from humbell_sim.feeds import Answer

_CONNECT_S = 5.0  # for the network, the handshake and the broker's answer, each
_KEEPALIVE_S = 15
# Blocks in flight: 4 s of them at the usual 0.25 s; brokers seldom take more than 20 (Mosquitto's default).
_WINDOW = 16

# MQTT 5.0, section 2.4: answers that will not change by trying again.
_FOR_GOOD = {
    0x84: "unsupported protocol version",
    0x85: "client identifier not valid",
    0x86: "bad user name or password",
    0x87: "not authorized",
    0x8A: "banned",
    0x8C: "bad authentication method",
    0x95: "packet too large",
}
_QOS = 1


@dataclass(frozen=True, slots=True)
class Broker:
    """
    Where a broker is and how to get in.

    Args:
        host: its name or address.

        port: its TCP port.

        user: None for none.

        password: None for none.

        tls: how to trust the broker and prove who we are; None for a connection in the clear.
    """

    host: str
    port: int
    user: str | None = None
    password: str | None = field(default=None, repr=False)
    tls: ssl.SSLContext | None = None


class MqttLink:
    """
    A connection that stands until it is lost or closed. Used by one thread.

    Args:
        broker: to connect to.

        client_id: no two connections at a time may share one.

        monotonic: seconds of a clock that nobody sets.

    Raises:
        OutOfReachError: the broker is away or busy; trying again later may help.

        ConfigError: the broker does not let us in.
    """

    def __init__(self, broker: Broker, client_id: str, monotonic: Callable[[], float]) -> None:
        self.window = _WINDOW
        self._most_bytes: int | None = None
        self._at = f"{broker.host}:{broker.port}"
        self._answers: list[Answer] = []
        self._accepted: ReasonCode | None = None
        self._ended: ReasonCode | None = None
        self._client = client = mqtt.Client(
            CallbackAPIVersion.VERSION2, client_id, protocol=mqtt.MQTTv5, reconnect_on_failure=False
        )
        client.max_inflight_messages = _WINDOW
        client.connect_timeout = _CONNECT_S
        client.on_connect = self._on_connect
        client.on_publish = self._on_publish
        client.on_disconnect = self._on_disconnect
        if broker.user is not None:
            client.username_pw_set(broker.user, broker.password)
        if broker.tls is not None:
            client.tls_set_context(broker.tls)
        try:
            client.connect(broker.host, broker.port, _KEEPALIVE_S, clean_start=True)
        except (OSError, ValueError) as error:
            raise OutOfReachError(f"{self._at}: {error}") from None
        give_up_s = monotonic() + _CONNECT_S
        while self._accepted is None:
            left_s = give_up_s - monotonic()
            if left_s <= 0:
                self.close()
                raise OutOfReachError(f"{self._at}: does not answer (is it an MQTT broker, and TLS as it wants it?)")
            self.turn(left_s)

    def publish(self, topic: str, payload: bytes) -> int:
        """
        Hand a message over, QoS 1, not retained.

        Returns:
            The number by which it will be confirmed.

        Raises:
            OutOfReachError: the connection is lost.

            ConfigError: the broker takes no message of this size.
        """
        if self._most_bytes is not None and len(payload) + len(topic) + 16 > self._most_bytes:
            raise ConfigError(
                f"{self._at}: takes messages of {self._most_bytes} bytes at most, and a block has {len(payload)} "
                "(make blocks shorter)"
            )
        info = self._client.publish(topic, payload, _QOS)
        if info.rc not in (MQTTErrorCode.MQTT_ERR_SUCCESS, MQTTErrorCode.MQTT_ERR_AGAIN):
            raise self._lost()
        return info.mid

    def turn(self, timeout_s: float) -> list[Answer]:
        """
        Let the connection work, and return the answers that came; waits at most *timeout_s* for the network.

        Raises:
            OutOfReachError: the connection is lost.

            ConfigError: the broker has ended it for good.
        """
        sock = self._client.socket()
        if sock is None:
            raise self._lost()
        poll = select.poll()
        poll.register(sock.fileno(), select.POLLIN | (select.POLLOUT if self._client.want_write() else 0))
        # What TLS has already decrypted does not show at the socket.
        decrypted = isinstance(sock, ssl.SSLSocket) and sock.pending() > 0
        events = sum(event for _, event in poll.poll(0 if decrypted else max(timeout_s, 0) * 1000))
        result = MQTTErrorCode.MQTT_ERR_SUCCESS
        if decrypted or events & ~select.POLLOUT:
            result = self._client.loop_read()
        if result == MQTTErrorCode.MQTT_ERR_SUCCESS and events & select.POLLOUT:
            result = self._client.loop_write()
        if result == MQTTErrorCode.MQTT_ERR_SUCCESS:
            result = self._client.loop_misc()
        answers, self._answers = self._answers, []
        # Answers that came before the end still count; the next turn tells of the end.
        if not answers and result != MQTTErrorCode.MQTT_ERR_SUCCESS:
            raise self._lost()
        return answers

    def close(self) -> None:
        """Say good-bye if the broker still listens, and let go of the connection. May be called twice."""
        sock = self._client.socket()
        if sock is not None:
            self._client.disconnect()
            sock.close()

    def _on_connect(
        self, _client: mqtt.Client, _data: object, _flags: object, reason: ReasonCode, properties: Properties | None
    ) -> None:
        if reason.is_failure:
            self._ended = reason
            return
        self._accepted = reason
        self.window = min(_WINDOW, getattr(properties, "ReceiveMaximum", _WINDOW))
        self._most_bytes = getattr(properties, "MaximumPacketSize", None)

    def _on_publish(
        self, _client: mqtt.Client, _data: object, number: int, reason: ReasonCode, _properties: object
    ) -> None:
        self._answers.append(Answer(number, reason.value, reason.getName().lower()))

    def _on_disconnect(
        self, _client: mqtt.Client, _data: object, flags: mqtt.DisconnectFlags, reason: ReasonCode, _properties: object
    ) -> None:
        if flags.is_disconnect_packet_from_server:
            self._ended = reason

    def _lost(self) -> Exception:
        if self._ended is None:
            if self._accepted is None:
                return OutOfReachError(f"{self._at}: hung up before it answered (does it want TLS, or a certificate?)")
            return OutOfReachError(f"{self._at}: the connection was lost")
        if self._ended.value in _FOR_GOOD:
            return ConfigError(f"{self._at}: refused: {_FOR_GOOD[self._ended.value]}")
        return OutOfReachError(f"{self._at}: ended the connection: {self._ended.getName().lower()}")
