"""One paho client from its connect to its end. Lives in one thread; its callbacks only enqueue."""

import os
import select
import socket
import ssl
from collections import deque
from collections.abc import Callable, Iterable, Mapping
from contextlib import suppress
from typing import Any

from paho.mqtt import client as mqtt
from paho.mqtt.enums import CallbackAPIVersion
from paho.mqtt.packettypes import PacketTypes
from paho.mqtt.properties import Properties
from paho.mqtt.reasoncodes import ReasonCode
from paho.mqtt.subscribeoptions import SubscribeOptions

from humbell.model import ConfigError
from humbell.wire.broker import BrokerSettings, TlsSettings
from humbell.wire.events import Answered, Ended, Event, Message, Published, Reason, Subscribed

CONNECT_S = 5.0  # for each of the host's addresses, and for the TLS handshake
LEAVE_S = 1.0  # for the broker to hang up when we take leave
_READ_BYTES = 65_536
_LEAVE_READS = 1000  # more than any system keeps unread for one connection
# Bytes. Twice the largest block: what is a little too large comes in and is counted, what is absurd does not.
MOST_BYTES = 16 * 2**20
_QOS = 1
_WAIT = (ssl.SSLWantReadError, ssl.SSLWantWriteError)


class Connection:
    """
    One connection to a broker; a new one has a new client object, so that nothing half done is carried over.

    Args:
        number: told with each message, so that it is acknowledged on the connection it came on.

        settings: of the broker.

        client_id: the session's name at the broker.

        session_expiry_s: for how long the broker keeps the session after the connection has ended; 0 for not at all.

        receive_maximum: messages that the broker may send ahead of our acknowledgements.

        environ: where secrets are looked up.
    """

    def __init__(
        self,
        number: int,
        settings: BrokerSettings,
        client_id: str,
        session_expiry_s: int,
        receive_maximum: int,
        environ: Mapping[str, str],
    ) -> None:
        self.number = number
        self.failure: tuple[str, Exception] | None = None
        self._settings = settings
        self._session_expiry_s = session_expiry_s
        self._receive_maximum = receive_maximum
        self._environ = environ
        self._events: deque[Event] = deque()
        self._complaint = ""
        self._client = client = mqtt.Client(
            CallbackAPIVersion.VERSION2, client_id, protocol=mqtt.MQTTv5, manual_ack=True
        )
        client.connect_timeout = CONNECT_S
        client.on_connect = self._guarded("on_connect", self.on_connect)
        client.on_disconnect = self._guarded("on_disconnect", self.on_disconnect)
        client.on_log = self._guarded("on_log", self.on_log)
        client.on_message = self._guarded("on_message", self.on_message)
        client.on_publish = self._guarded("on_publish", self.on_publish)
        client.on_subscribe = self._guarded("on_subscribe", self.on_subscribe)

    def open(self) -> None:
        """
        Connect and send CONNECT; the answer comes as an event. Blocks for some multiples of `CONNECT_S` at most, name
        service aside.

        Raises:
            ConfigError: a secret or a certificate cannot be read.

            OSError: the broker cannot be reached, or does not pass for what it should be.
        """
        settings = self._settings
        if settings.user is not None:
            password = settings.password.reveal(self._environ) if settings.password else None
            self._client.username_pw_set(settings.user, password)
        if settings.tls is not None:
            self._client.tls_set_context(_context(settings.tls))
        properties = Properties(PacketTypes.CONNECT)  # type: ignore[no-untyped-call]
        properties.SessionExpiryInterval = self._session_expiry_s
        properties.ReceiveMaximum = self._receive_maximum
        properties.MaximumPacketSize = MOST_BYTES
        self._client.connect(
            settings.host,
            settings.port_in_force,
            settings.keepalive_s,
            clean_start=not self._session_expiry_s,
            properties=properties,
        )

    @property
    def alive(self) -> bool:
        """Whether the socket is open; says nothing about the broker."""
        return self._client.socket() is not None

    @property
    def keepalive_s(self) -> int:
        """The keep-alive time in force: the broker may have set another than ours; 0 for none."""
        return self._client.keepalive

    def turn(self, wake: socket.socket, timeout_s: float, *, reading: bool) -> bool:
        """
        Wait until there is something to read or write, or *wake* is readable, and read and write it.

        Args:
            wake: ends the wait.

            timeout_s: longest wait.

            reading: whether there is room for what may come in; otherwise the broker is left to wait, by TCP's means.

        Returns:
            Whether the broker sent something and the connection still stands. MQTT gives the answer to a ping no
            callback, so every byte from the broker counts as a sign of life.
        """
        own = self._client.socket()
        if own is None:
            return False
        poll = select.poll()
        poll.register(wake.fileno(), select.POLLIN)
        events = (select.POLLIN if reading else 0) | (select.POLLOUT if self._client.want_write() else 0)
        poll.register(own.fileno(), events)
        # Bytes that TLS has already decoded are in no socket any more.
        ready = reading and isinstance(own, ssl.SSLSocket) and own.pending() > 0
        found = dict(poll.poll(0 if ready else timeout_s * 1000)).get(own.fileno(), 0)
        heard = False
        if ready or found & ~select.POLLOUT:
            heard = self._client.loop_read() == mqtt.MQTT_ERR_SUCCESS and self.alive
        if found & select.POLLOUT:
            self._client.loop_write()
        self._client.loop_misc()
        return heard

    def take(self) -> Iterable[Event]:
        """Yield what has happened, oldest first."""
        while self._events:
            yield self._events.popleft()

    def subscribe(self, topics: Iterable[str]) -> int | None:
        """Ask for *topics*; return the number of the request, or None where the connection is gone."""
        # A retained message comes once, marked as such; those behind it, published with the same flag, are live.
        options = SubscribeOptions(qos=_QOS, retainHandling=SubscribeOptions.RETAIN_SEND_IF_NEW_SUB)
        return self._client.subscribe([(topic, options) for topic in topics])[1]

    def unsubscribe(self, topics: Iterable[str]) -> None:
        """Ask for *topics* no more."""
        self._client.unsubscribe(list(topics))

    def acknowledge(self, mid: int) -> None:
        """Tell the broker that it may forget message *mid*."""
        self._client.ack(mid, _QOS)

    def publish(self, topic: str, payload: bytes, *, retain: bool) -> int:
        """
        Send a message at QoS 1; return its number.

        Raises:
            ValueError: no broker could take it.
        """
        if not topic:
            raise ValueError("the topic is empty")
        return self._client.publish(topic, payload, _QOS, retain).mid

    def close(self, *, politely: bool) -> None:
        """End it; *politely* tells the broker, and waits a moment for it to hang up, having read all that was sent."""
        own = self._client.socket()
        if own is not None and politely:
            # paho closes its own end at once, and what the broker has not read by then may be lost.
            with socket.socket(fileno=os.dup(own.fileno())) as line, suppress(OSError):
                self._client.disconnect()
                line.settimeout(LEAVE_S)
                for _ in range(_LEAVE_READS):
                    if not line.recv(_READ_BYTES):
                        break
            own = self._client.socket()
        if own is not None:
            own.close()

    def on_connect(
        self, _client: object, _data: object, flags: mqtt.ConnectFlags, reason: ReasonCode, _: object
    ) -> None:
        """Enqueue the broker's answer to CONNECT."""
        self._events.append(Answered(_reason(reason), flags.session_present))

    def on_disconnect(
        self, _client: object, _data: object, flags: mqtt.DisconnectFlags, reason: ReasonCode, _: object
    ) -> None:
        """Enqueue the end."""
        by_broker = flags.is_disconnect_packet_from_server
        self._events.append(Ended(_reason(reason) if by_broker else None, self._complaint))

    def on_log(self, _client: object, _data: object, level: int, text: str) -> None:
        """Keep what the socket complains of: paho passes it on in no other way."""
        if level == mqtt.MQTT_LOG_ERR:
            self._complaint = text.rpartition("on socket: ")[2]

    def on_message(self, _client: object, _data: object, message: mqtt.MQTTMessage) -> None:
        """Enqueue a message."""
        self._events.append(
            Message(message.topic, bytes(message.payload), message.qos, message.retain, self.number, message.mid)
        )

    def on_publish(self, _client: object, _data: object, mid: int, reason: ReasonCode, _: object) -> None:
        """Enqueue the broker's answer to a message of ours."""
        self._events.append(Published(mid, _reason(reason)))

    def on_subscribe(self, _client: object, _data: object, mid: int, reasons: list[ReasonCode], _: object) -> None:
        """Enqueue the broker's answer to a subscription."""
        self._events.append(Subscribed(mid, tuple(_reason(reason) for reason in reasons)))

    def _guarded(self, where: str, callback: Callable[..., None]) -> Callable[..., None]:
        def guarded(*args: object) -> None:
            try:
                callback(*args)
            except Exception as error:  # noqa: BLE001 - paho would leave its work half done; the link starts anew
                self.failure = self.failure or (where, error)

        return guarded


class _TlsSocket(ssl.SSLSocket):
    def do_handshake(self, block: bool = False) -> None:
        """Close the socket where that fails: paho leaves it open."""
        try:
            super().do_handshake(block)
        except Exception:
            self.close()
            raise

    def send(self, data: Any, flags: int = 0) -> int:  # noqa: ANN401 - the same
        """Where the broker has hung up, raise the reason that it gave first: it lies unread."""
        try:
            return super().send(data, flags)
        except _WAIT:
            raise
        except OSError:
            with suppress(*_WAIT):
                super().recv(1)
            raise


def _context(tls: TlsSettings) -> ssl.SSLContext:
    # Made for each connection, so that renewed files are used at the next one.
    try:
        context = ssl.create_default_context(cafile=str(tls.ca))
    except OSError as error:
        raise ConfigError(f"tls.ca: {tls.ca} cannot be used: {_why(error)} (give a PEM file of certificates)") from None
    context.sslsocket_class = _TlsSocket
    if tls.certificate and tls.key:
        try:
            # Without a pass phrase given, OpenSSL would ask for one on the terminal.
            context.load_cert_chain(tls.certificate, tls.key, password="")
        except (OSError, ValueError) as error:
            raise ConfigError(
                f"tls.certificate: {tls.certificate} and {tls.key} cannot be used: {_why(error)} "
                "(give a certificate and its key without a pass phrase, readable by this service)"
            ) from None
    return context


def _why(error: Exception) -> str:
    if isinstance(error, ssl.SSLError):
        return (error.reason or "no certificates in it").replace("_", " ").lower()
    return ((error.strerror if isinstance(error, OSError) else None) or str(error)).lower()


def _reason(reason: ReasonCode) -> Reason:
    return Reason(reason.value, reason.getName())
