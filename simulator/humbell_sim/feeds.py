"""Sends blocks until each is confirmed, whatever the connection does: the sender that the wire's rules expect."""

import threading
from collections import deque
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Protocol

from humbell.model import ConfigError, OutOfReachError
from humbell.wire import encode
from humbell_sim.blocks import Blocks

TOPIC = "humbell/blocks/"

_FIRST_WAIT_S, _LONGEST_WAIT_S = 0.5, 8.0  # between connections, doubled each time: a broker restarts in seconds
_ANSWER_S = 30.0  # without any confirmation while some are owed: the connection is dead, whatever it says
_TURN_S = 0.1  # the longest time that a stop goes unnoticed
_OWED_S = 0.5  # at a stop, for the confirmations that are on their way
_GRACE_S = 1.0  # at a stop, for that and for saying good-bye

# MQTT 5.0, section 3.4.2.1. From 0x80 on an answer is a refusal; these three may pass later.
_REFUSED = 0x80
_FOR_NOW = {0x80, 0x83, 0x97}  # unspecified, implementation specific, quota exceeded


@dataclass(frozen=True, slots=True)
class Answer:
    """
    What the broker says to one message.

    Args:
        number: which.

        code: reason code of MQTT 5.0.

        text: the same in words.
    """

    number: int
    code: int
    text: str


class Link(Protocol):
    """A connection that stands; `humbell_sim.link.MqttLink` has the details."""

    window: int
    """Messages that may be unconfirmed at a time."""

    def publish(self, topic: str, payload: bytes) -> int:
        """Hand a message over, and return the number by which it will be confirmed."""
        ...

    def turn(self, timeout_s: float) -> Sequence[Answer]:
        """Let the connection work, and return the answers that came."""
        ...

    def close(self) -> None:
        """Let go of the connection."""
        ...


@dataclass(slots=True)
class Tally:
    """
    What became of the blocks.

    Args:
        sent: that were handed to a connection.

        confirmed: that the broker has taken.

        resent: times that one was handed over again; it may then arrive twice.
    """

    sent: int = 0
    confirmed: int = 0
    resent: int = 0


@dataclass(slots=True, eq=False)
class _Message:
    seq: int
    payload: bytes
    tries: int = 0


class Sender:
    """
    Sends the blocks of one source.

    A block is made when it is due and the window has room, so what is unsent needs no memory: after an outage the
    sender catches up, and skips nothing.

    Args:
        blocks: to send.

        connect: returns a new connection; raises `OutOfReachError` to be tried again, `ConfigError` to give up.

        stop: ends the sender, sent or not.

        monotonic: seconds of a clock that nobody sets.

        tell: gets a line about each thing that went wrong.
    """

    def __init__(
        self,
        blocks: Blocks,
        connect: Callable[[], Link],
        stop: threading.Event,
        monotonic: Callable[[], float],
        tell: Callable[[str], None],
    ) -> None:
        self.tally = Tally()
        self._blocks = blocks
        self._topic = TOPIC + blocks.source
        self._connect = connect
        self._stop = stop
        self._monotonic = monotonic
        self._tell = tell
        self._began_s = 0.0
        self._in_touch = False
        self._again: deque[_Message] = deque()
        self._flying: dict[int, _Message] = {}

    @property
    def complete(self) -> bool:
        """Whether all was confirmed that there was to send; of a source without an end, all until the stop."""
        all_sent = (self._blocks.finished or self._blocks.endless) and not self._again
        return self._in_touch and all_sent and self.tally.sent == self.tally.confirmed

    def run(self) -> None:
        """Send, until all is confirmed, or refused for good, or the stop comes."""
        self._began_s = self._monotonic()
        wait_s = _FIRST_WAIT_S
        while not self._stop.is_set():
            confirmed = self.tally.confirmed
            try:
                self._connect_and_send()
            except OutOfReachError as error:
                if self.tally.confirmed > confirmed:
                    wait_s = _FIRST_WAIT_S
                if self._stop.is_set():
                    return
                self._say(f"{error} (trying again in {wait_s:g} s)")
                self._stop.wait(wait_s)
                wait_s = min(2 * wait_s, _LONGEST_WAIT_S)
            except ConfigError as error:
                self._say(f"{error}; giving up")
                return
            else:
                self._in_touch = True
                return

    def _connect_and_send(self) -> None:
        link = self._connect()
        try:
            self._send(link)
        finally:
            # In the order of their numbers: late blocks look like gaps to a receiver.
            self._again.extendleft(sorted(self._flying.values(), key=lambda message: -message.seq))
            self._flying.clear()
            link.close()

    def _send(self, link: Link) -> None:
        heard_s = self._monotonic()
        while not self._stop.is_set():
            message = self._next() if len(self._flying) < link.window else None
            if message is not None:
                self._publish(link, message)
            elif self._blocks.finished and not self._flying:
                return
            answers = link.turn(0.0 if message is not None else self._idle_s(link))
            now_s = self._monotonic()
            if answers or not self._flying:
                heard_s = now_s
            elif now_s - heard_s > _ANSWER_S:
                raise OutOfReachError(f"no confirmation for {_ANSWER_S:g} s")
            for answer in answers:
                self._note(answer)
        give_up_s = self._monotonic() + _OWED_S
        while self._flying and self._monotonic() < give_up_s:
            for answer in link.turn(_TURN_S):
                self._note(answer)

    def _next(self) -> _Message | None:
        if self._again:
            return self._again[0]
        if self._blocks.finished or self._due_in_s() > 0:
            return None
        block = self._blocks.take()
        # Kept before it is handed over, so that no fault in between can lose it.
        self._again.append(_Message(block.seq, encode(block)))
        return self._again[0]

    def _publish(self, link: Link, message: _Message) -> None:
        number = link.publish(self._topic, message.payload)
        self._again.popleft()
        self._flying[number] = message
        if message.tries:
            self.tally.resent += 1
        else:
            self.tally.sent += 1
        message.tries += 1

    def _note(self, answer: Answer) -> None:
        message = self._flying.get(answer.number)
        if message is None:
            return
        if answer.code in _FOR_NOW:
            raise OutOfReachError(f"block {message.seq} was refused: {answer.text}")
        if answer.code >= _REFUSED:
            raise ConfigError(f"block {message.seq} was refused: {answer.text}")
        del self._flying[answer.number]
        self.tally.confirmed += 1

    def _due_in_s(self) -> float:
        return self._began_s + self._blocks.due_s - self._monotonic()

    def _idle_s(self, link: Link) -> float:
        if self._blocks.finished or len(self._flying) >= link.window:
            return _TURN_S
        return min(max(self._due_in_s(), 0.0), _TURN_S)

    def _say(self, text: str) -> None:
        self._tell(f"{self._blocks.source}: {text}")


def run_all(senders: Sequence[Sender], stop: threading.Event) -> Tally:
    """
    Run all senders at once, each in a thread, until they have ended or *stop* is set.

    Returns:
        The sum of their tallies.
    """
    threads = [
        # A connection that is being made cannot be interrupted, and must not hold up the end.
        threading.Thread(target=sender.run, name=f"feed-{number}", daemon=True)
        for number, sender in enumerate(senders)
    ]
    for thread in threads:
        thread.start()
    for thread in threads:
        while thread.is_alive() and not stop.is_set():
            thread.join(_TURN_S)
    if stop.is_set():
        for thread in threads:
            thread.join(_GRACE_S / len(threads))
    tallies = [sender.tally for sender in senders]
    return Tally(
        sum(tally.sent for tally in tallies),
        sum(tally.confirmed for tally in tallies),
        sum(tally.resent for tally in tallies),
    )
