"""A link to one MQTT broker that comes back by itself. Transport only: what is unconfirmed is its user's to keep."""

import os
import random
import socket
import threading
import time
from collections.abc import Callable, Iterable, Mapping
from concurrent.futures import Future
from contextlib import suppress
from itertools import count
from typing import Protocol

from humbell.model import OutOfReachError
from humbell.wire import trouble
from humbell.wire.backoff import Backoff, Breaks
from humbell.wire.broker import BrokerSettings
from humbell.wire.errors import CallbackError, LostError
from humbell.wire.events import Message
from humbell.wire.health import LinkHealth
from humbell.wire.session import Callbacks, Session
from humbell.wire.subscriptions import Subscriptions
from humbell.wire.trouble import Trouble

SESSION_EXPIRY_S = 3600  # a broker keeps what we missed for as long as a restart or a repair on site takes
RECEIVE_MAXIMUM = 16  # messages; Mosquitto sends no more than 20 ahead
STOP_S = 15.0  # outlasts a connect to a host with two addresses
STEADY_S = 10.0  # a connection that stood this long was a good one

_numbers = count(1)
_LEAVING = Trouble("the link was stopped")


class Note(Protocol):
    """Takes an event for the log, in any thread. Changes are told, not states; repeats are the taker's to limit."""

    def __call__(self, event: str, /, **fields: object) -> None:
        """Log *event*."""


class MqttLink:
    """
    Keeps one connection to one broker, in a thread of its own.

    An exception in whatever the link calls is counted and told, and the connection is made anew with a new client
    object; what was not acknowledged by then comes again.

    Args:
        name: of the broker, for messages.

        settings: of the broker.

        client_id: the session's name at the broker; no two links may share one.

        note: takes events for the log.

        receive: called in the link's thread with each message that comes in; must not wait. The message is to be
            acknowledged with `ack`, then or later. May raise `NoRoomError`.

        connected: called in the link's thread when the broker has let us in, before the first message of that
            connection; its argument tells whether the broker still had our session, so that all that was not
            acknowledged comes again.

        environ: where secrets are looked up.

        session_expiry_s: for how long the broker keeps the session while we are away; 0 for not at all.

        receive_maximum: messages that the broker may send ahead of our acknowledgements.

        clock: monotonic, seconds.

        sleep: waits between two attempts; None for a wait that `stop` cuts short.

        rand: returns a number from 0 to 1.
    """

    def __init__(
        self,
        name: str,
        settings: BrokerSettings,
        client_id: str,
        *,
        note: Note,
        receive: Callable[[Message], None] = lambda _: None,
        connected: Callable[[bool], None] = lambda _: None,
        environ: Mapping[str, str] = os.environ,
        session_expiry_s: int = SESSION_EXPIRY_S,
        receive_maximum: int = RECEIVE_MAXIMUM,
        clock: Callable[[], float] = time.monotonic,
        sleep: Callable[[float], object] | None = None,
        rand: Callable[[], float] = random.random,
    ) -> None:
        self.name = name
        self._settings = settings
        self._client_id = client_id
        self._tell = note
        self._receive = receive
        self._connected = connected
        self._environ = environ
        self._session_expiry_s = session_expiry_s
        self._receive_maximum = receive_maximum
        self._clock = clock
        self._stopping = threading.Event()
        self._sleep = self._stopping.wait if sleep is None else sleep
        self._backoff = Backoff(rand)
        self._breaks = Breaks()
        self._thread = threading.Thread(target=self._run, name=f"mqtt {name}", daemon=True)
        self._subscriptions = Subscriptions()
        self._lock = threading.Lock()  # holds the socket open while it is written to
        self._wake_in: socket.socket | None = None
        # Written by the link's thread alone.
        self._session: Session | None = None
        self._confirmed_s: float | None = None
        self._trouble: str | None = None
        self._connections = 0
        self._failures = 0

    def start(self) -> None:
        """Begin to connect; returns at once. A link is started once."""
        self._thread.start()

    def stop(self, timeout_s: float = STOP_S) -> bool:
        """Take leave of the broker, which keeps the session; return whether that was over within *timeout_s*."""
        self._stopping.set()
        self._wake()
        if self._thread.ident is not None:
            self._thread.join(timeout_s)
        return not self._thread.is_alive()

    @property
    def alive(self) -> bool:
        """Whether the link's thread runs."""
        return self._thread.is_alive()

    @property
    def health(self) -> LinkHealth:
        """How the link is doing."""
        session, confirmed_s = self._session, self._confirmed_s
        accepted = session is not None and session.accepted_s is not None
        told = self._trouble or trouble.not_subscribed(self._subscriptions.denied.items(), self._settings)
        return LinkHealth(
            ready=accepted and self._subscriptions.settled,
            confirmed_age_s=None if confirmed_s is None else self._clock() - confirmed_s,
            trouble=f"brokers.{self.name}: {told}" if told else None,
            connections=self._connections,
            failures=self._failures,
        )

    def subscribe(self, topics: Iterable[str]) -> None:
        """Have the messages of *topics*, at QoS 1, on this connection and all that follow."""
        self._subscriptions.want(topics)
        self._wake()

    def unsubscribe(self, topics: Iterable[str]) -> None:
        """Have them no more, even where an earlier run has subscribed to them."""
        self._subscriptions.drop(topics)
        self._wake()

    def ack(self, message: Message) -> None:
        """Tell the broker that it may forget *message*; without effect once the connection it came on has ended."""
        session = self._session
        # Each connection numbers its messages anew.
        if message.qos and session is not None and session.number == message.connection:
            session.ack(message.mid)
            self._wake()

    def publish(self, topic: str, payload: bytes, *, retain: bool = False) -> "Future[None]":
        """
        Send a message at QoS 1. Nothing is kept for later; how many wait for an answer is the caller's to bound.

        Returns:
            Done when the broker has taken the message. It raises `RefusedError` where the broker never will, and
            `OutOfReachError` where the connection ended before the answer.

        Raises:
            OutOfReachError: there is no connection now.
        """
        session = self._session
        if session is None:
            raise OutOfReachError(f"brokers.{self.name}: {self._trouble or 'not connected yet'}")
        try:
            done = session.publish(topic, payload, retain=retain)
        except OutOfReachError as error:
            raise OutOfReachError(f"brokers.{self.name}: {error}") from None
        self._wake()
        return done

    def _wake(self) -> None:
        if threading.current_thread() is self._thread:
            return
        # A full buffer wakes as well.
        with self._lock, suppress(BlockingIOError):
            if self._wake_in is not None:
                self._wake_in.send(b"\0")

    def _run(self) -> None:
        wake, wake_in = socket.socketpair()
        with wake, wake_in:
            for end in (wake, wake_in):
                end.settimeout(0)
            with self._lock:
                self._wake_in = wake_in
            while not self._stopping.is_set():
                why = self._attempt(wake)
                if not self._stopping.is_set():
                    self._sleep(self._backoff.next_s(patient=why.patient))
            with self._lock:
                self._wake_in = None

    def _attempt(self, wake: socket.socket) -> Trouble:
        session = None
        why = _LEAVING
        try:
            self._session = session = self._make()
            self._drive(session, wake)
        except LostError as error:
            why = error.why
        except CallbackError as error:
            why = self._failed(error.where, error.error)
        except Exception as error:  # noqa: BLE001 - the task's edge: counted, told, and begun anew
            why = self._failed("the loop", error)
        if not why.unexplained or session is None or session.accepted_s is None:
            self._breaks.reset()
        elif self._breaks.count(lasted_s=self._clock() - session.accepted_s):
            why = trouble.habit(self._settings, self._client_id)
        if why is not _LEAVING and self._trouble != why.text:
            self._note("mqtt_lost", trouble=why.text)
        self._trouble = why.text
        self._session = None
        try:
            if session is not None:
                session.close(why, politely=why is _LEAVING)
        except Exception as error:  # noqa: BLE001 - the same
            self._failed("the end", error)
        return why

    def _drive(self, session: Session, wake: socket.socket) -> None:
        session.open()
        while not self._stopping.is_set():
            session.turn(wake)
            if session.accepted_s is not None and self._clock() - session.accepted_s > STEADY_S:
                self._backoff.reset()
        session.send()

    def _make(self) -> Session:
        from humbell.wire.connection import Connection  # noqa: PLC0415 - the client library takes 0.1 s to import

        connection = Connection(
            next(_numbers),
            self._settings,
            self._client_id,
            self._session_expiry_s,
            self._receive_maximum,
            self._environ,
        )
        callbacks = Callbacks(self._receive, self._let_in, self._not_let_have, self._heard)
        return Session(connection, self._settings, self._client_id, self._subscriptions, callbacks, self._clock)

    def _let_in(self, session_present: bool) -> None:
        self._connections += 1
        self._trouble = None
        self._note("mqtt_connected", session_present=session_present)
        self._connected(session_present)

    def _not_let_have(self, text: str) -> None:
        self._note("mqtt_denied", trouble=text)

    def _heard(self) -> None:
        self._confirmed_s = self._clock()

    def _failed(self, where: str, error: Exception) -> Trouble:
        self._failures += 1
        text = f"{type(error).__name__}: {error}"
        self._note("mqtt_callback_failed", where=where, error=text, count=self._failures)
        return Trouble(f"a fault of this program in {where}: {text} (report it; the connection is made anew)")

    def _note(self, event: str, **fields: object) -> None:
        try:
            self._tell(event, broker=self.name, **fields)
        except Exception:  # noqa: BLE001 - a full log must not cut a link
            self._failures += 1
