"""The life of one connection of a link: what goes out on it, what comes in, and by when."""

import socket
import threading
from collections import deque
from collections.abc import Callable
from concurrent.futures import Future
from contextlib import suppress
from dataclasses import dataclass, field
from typing import TYPE_CHECKING

from humbell.model import OutOfReachError
from humbell.wire import trouble
from humbell.wire.broker import BrokerSettings
from humbell.wire.errors import CallbackError, LostError, NoRoomError, RefusedError
from humbell.wire.events import Answered, Ended, Event, Message, Published, Subscribed
from humbell.wire.subscriptions import Subscriptions
from humbell.wire.trouble import Trouble

if TYPE_CHECKING:
    from humbell.wire.connection import Connection

ANSWER_S = 5.0  # for the answer to CONNECT; with the connect itself below 15 s
SUBSCRIBED_S = 10.0  # for the answer to SUBSCRIBE, behind which a broker may first send what it has kept
FULL_S = 5.0  # for room to come; while we do not read, pings find no answer, which must come within the keep-alive time
_TURN_S = 0.5  # how often deadlines are looked at
_GRACE_S = 2.0  # between paho's own deadline for a ping and ours


@dataclass(frozen=True, slots=True)
class Callbacks:
    """
    What a session calls in its thread.

    Args:
        receive: with each message.

        connected: when the broker has let us in; with whether it still had our session.

        denied: with topics that it does not let us have.

        heard: at each sign of life from it.
    """

    receive: Callable[[Message], None]
    connected: Callable[[bool], None]
    denied: Callable[[str], None]
    heard: Callable[[], None]


@dataclass(frozen=True, slots=True)
class _Outgoing:
    topic: str
    payload: bytes = field(repr=False)
    retain: bool
    done: "Future[None]"


class Session:
    """
    Drives one connection.

    `ack` and `publish` may be called from any thread, all else from that of the link.

    Args:
        connection: not yet open.

        settings: of the broker.

        client_id: for messages.

        subscriptions: what is to be subscribed to.

        callbacks: what to call.

        clock: monotonic, seconds.
    """

    def __init__(
        self,
        connection: "Connection",
        settings: BrokerSettings,
        client_id: str,
        subscriptions: Subscriptions,
        callbacks: Callbacks,
        clock: Callable[[], float],
    ) -> None:
        self.number = connection.number
        self.accepted_s: float | None = None
        self._connection = connection
        self._settings = settings
        self._client_id = client_id
        self._subscriptions = subscriptions
        self._callbacks = callbacks
        self._clock = clock
        self._lock = threading.Lock()
        self._outgoing: list[int | _Outgoing] = []
        self._pending: dict[int, Future[None]] = {}
        self._over: Trouble | None = None
        self._events: deque[Event] = deque()
        self._full_s: float | None = None
        self._heard_s = self._opened_s = clock()

    def open(self) -> None:
        """
        Connect.

        Raises:
            LostError: that is not possible now.
        """
        self._subscriptions.renew()
        try:
            self._connection.open()
        except Exception as error:  # whatever names, sockets and certificates come up with
            raise LostError(trouble.of_connecting(error, self._settings)) from error
        self._heard_s = self._opened_s = self._clock()

    def turn(self, wake: socket.socket) -> None:
        """
        Send what is waiting, then wait a moment for what comes in.

        Raises:
            LostError: the connection has ended.

            CallbackError: a callback failed; the connection is not to be used any more.
        """
        self.send()
        self._work()
        if self._connection.turn(wake, _TURN_S, reading=not self._events):
            self._heard_s = self._clock()
            self._callbacks.heard()
        with suppress(BlockingIOError):
            wake.recv(4096)
        self._events.extend(self._connection.take())
        self._work()
        if self._connection.failure is not None:
            raise CallbackError(*self._connection.failure)
        self._check()

    def send(self) -> None:
        """Hand over what is waiting to go out."""
        with self._lock:
            outgoing, self._outgoing = self._outgoing, []
        for item in outgoing:
            if isinstance(item, int):
                self._connection.acknowledge(item)
            elif item.done.set_running_or_notify_cancel():
                self._publish(item)
        if self.accepted_s is None:
            return
        wanted, unwanted = self._subscriptions.due(self._clock())
        if unwanted:
            self._connection.unsubscribe(unwanted)
        if wanted and (mid := self._connection.subscribe(wanted)) is not None:
            self._subscriptions.ask(mid, wanted, self._clock())

    def close(self, why: Trouble, *, politely: bool) -> None:
        """End the connection; what was published and not answered fails for the reason *why*."""
        with self._lock:
            self._over = why
            unsent, self._outgoing = self._outgoing, []
        try:
            self._connection.close(politely=politely)
        finally:
            waiting = [item.done for item in unsent if isinstance(item, _Outgoing)]
            lost = [done for done in waiting if done.set_running_or_notify_cancel()]
            for done in [*self._pending.values(), *lost]:
                done.set_exception(OutOfReachError(why.text))
            self._pending.clear()

    def ack(self, mid: int) -> None:
        """Have message *mid* acknowledged."""
        with self._lock:
            if self._over is None:
                self._outgoing.append(mid)

    def publish(self, topic: str, payload: bytes, *, retain: bool) -> "Future[None]":
        """
        Have a message sent.

        Raises:
            OutOfReachError: the broker has not let us in, or the connection has ended.
        """
        done: Future[None] = Future()
        with self._lock:
            if self._over is not None or self.accepted_s is None:
                raise OutOfReachError(self._over.text if self._over else "not connected yet")
            self._outgoing.append(_Outgoing(topic, payload, retain, done))
        return done

    def _publish(self, item: _Outgoing) -> None:
        try:
            mid = self._connection.publish(item.topic, item.payload, retain=item.retain)
        except ValueError as error:
            item.done.set_exception(RefusedError(f"{item.topic}: {error}"))
        else:
            self._pending[mid] = item.done

    def _work(self) -> None:
        while self._events:
            try:
                self._handle(self._events[0])
            except NoRoomError as error:
                now_s = self._clock()
                self._full_s = now_s if self._full_s is None else self._full_s
                if now_s - self._full_s > min(FULL_S, self._settings.keepalive_s / 2):
                    raise LostError(trouble.NO_ROOM) from error
                return
            self._full_s = None
            self._events.popleft()

    def _handle(self, event: Event) -> None:
        match event:
            case Message():
                self._call("receive", self._callbacks.receive, event)
            case Answered(reason, session_present):
                if reason.failed:
                    raise LostError(trouble.refused(reason, self._settings, self._client_id))
                self.accepted_s = self._clock()
                self._call("connected", self._callbacks.connected, session_present)
            case Subscribed():
                denied = self._subscriptions.answer(event, self._clock())
                if denied:
                    self._callbacks.denied(trouble.not_subscribed(denied.items(), self._settings))
            case Published(mid, reason):
                done = self._pending.pop(mid)
                if reason.failed:
                    done.set_exception(RefusedError(f"the broker refuses a message: {reason.name.lower()}"))
                else:
                    done.set_result(None)
            case Ended():
                raise LostError(self._end(event))

    def _end(self, event: Ended) -> Trouble:
        silent_s = self._clock() - self._heard_s
        if event.reason is None and not event.detail and silent_s >= self._settings.keepalive_s:
            return trouble.silent("sign of life", round(silent_s), self._settings)
        if self.accepted_s is None and event.reason is None:
            return trouble.lost(event.detail, self._settings)
        return trouble.ended(event, self._settings, self._client_id)

    def _check(self) -> None:
        now_s = self._clock()
        if not self._connection.alive:
            raise LostError(self._end(Ended(None, "")))
        if self.accepted_s is None and now_s - self._opened_s > ANSWER_S:
            raise LostError(trouble.silent("answer", ANSWER_S, self._settings))
        if self._full_s is None and self._subscriptions.overdue(now_s, SUBSCRIBED_S):
            raise LostError(trouble.silent("answer to a subscription", SUBSCRIBED_S, self._settings))
        keepalive_s = self._connection.keepalive_s
        if keepalive_s and now_s - self._heard_s > 2 * keepalive_s + _GRACE_S:
            raise LostError(trouble.silent("sign of life", round(now_s - self._heard_s), self._settings))

    def _call(self, where: str, callback: Callable[..., None], *args: object) -> None:
        try:
            callback(*args)
        except NoRoomError:
            raise
        except Exception as error:
            raise CallbackError(where, error) from error
