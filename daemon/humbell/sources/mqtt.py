"""Blocks that come in over an MQTT broker: each is handed over once, and none is lost without being counted."""

import dataclasses
import threading
import time
from collections import deque
from collections.abc import Callable
from typing import Annotated, Literal

from pydantic import BaseModel, ConfigDict, Field

from humbell.model import Block, Id, OutOfReachError, SampleUnit
from humbell.sources.counters import SourceCounters, Tally
from humbell.sources.hub import MqttHub
from humbell.sources.repeats import Repeats
from humbell.sources.settings import MAX_RATE_HZ, MIN_RATE_HZ
from humbell.wire import BlockError, LinkHealth, Message, NoRoomError, Note, decode

# Bytes in one source's queue, and again held: blocks of the largest size do not fill a small computer.
QUEUE_BYTES = 32 * 2**20
# Messages. Brokers are told to send 16 ahead, but not all keep to it: Mosquitto 2.0.11 sends all that it has once a few
# are acknowledged, and it has up to 1000 by default.
HELD_MESSAGES = 1024


class MqttSettings(BaseModel):
    """Blocks from an MQTT broker, as DEVELOPERS.md describes them."""

    model_config = ConfigDict(frozen=True, extra="forbid")

    kind: Annotated[Literal["mqtt"], Field(description="Blocks that come in over an MQTT broker.")]
    broker: Annotated[Id, Field(description="Name of the broker, under brokers.")]
    topic: Annotated[
        str | None,
        Field(
            pattern=r"^[^+#$\x00][^+#\x00]*$",
            max_length=256,
            description="Topic of this source alone, without wildcards; default: humbell/blocks/ and its name.",
        ),
    ] = None
    max_age_s: Annotated[
        float,
        Field(
            ge=0,
            allow_inf_nan=False,
            description="A block that ended longer ago than this when it comes in is dropped and counted; 0: none is.",
        ),
    ] = 60.0
    queue_blocks: Annotated[
        int, Field(ge=1, le=4096, description="Blocks that may wait to be measured; then the broker has to wait.")
    ] = 64  # 16 s at 4 blocks/s: outlasts a slow disk sync
    unit: Annotated[
        SampleUnit | None, Field(description="Unit that is expected; a block with another one is refused.")
    ] = None
    full_scale: Annotated[
        float | None,
        Field(
            gt=0,
            allow_inf_nan=False,
            description="Largest magnitude that the converter gives, in the blocks' unit; makes clipping visible.",
        ),
    ] = None
    rate_hz: Annotated[
        float | None,
        Field(
            ge=MIN_RATE_HZ,
            le=MAX_RATE_HZ,
            allow_inf_nan=False,
            description="Rate that is expected, in samples a second and channel (Hz), 1 to 512000. "
            "A block with another rate is refused.",
        ),
    ] = None


@dataclasses.dataclass(frozen=True, slots=True)
class _Arrival:
    message: Message
    came_s: float
    came_ns: int


class MqttSource:
    """
    Delivers the blocks of one topic.

    A message is acknowledged when it has a place in the queue. While the queue is full it is held and not acknowledged,
    so that the broker keeps it and, when it has sent some ahead, waits; should it send more than can be held, the
    connection is given up. In the thread that calls `read` messages are decoded, and what breaks a rule is dropped and
    counted.

    Args:
        name: the source's id.

        settings: as they stand in the configuration.

        hub: the links to the brokers.

        note: takes events for the log; here the first drop for each reason.

        utc_ns: UTC, ns since 1970.

        clock: monotonic, seconds.

    Raises:
        ConfigError: there is no such broker, or another source has the topic.
    """

    def __init__(
        self,
        name: str,
        settings: MqttSettings,
        hub: MqttHub,
        *,
        note: Note,
        utc_ns: Callable[[], int] = time.time_ns,
        clock: Callable[[], float] = time.monotonic,
    ) -> None:
        self._name = name
        self._settings = settings
        self._hub = hub
        self._note = note
        self._utc_ns = utc_ns
        self._clock = clock
        self._topic = settings.topic or f"humbell/blocks/{name}"
        self._repeats = Repeats()
        self._changed = threading.Condition()
        # All below is guarded by it.
        self._tally = Tally(clock)
        self._queue: deque[_Arrival] = deque()
        self._queue_bytes = 0
        self._held: deque[_Arrival] = deque()
        self._held_bytes = 0
        self._in_hand = 0
        self._open = False
        hub.claim(settings.broker, self._topic, self)

    @property
    def name(self) -> str:
        """The source's id."""
        return self._name

    @property
    def counters(self) -> SourceCounters:
        """What became of the blocks so far; may be asked for in any thread."""
        with self._changed:
            return self._tally.snapshot(len(self._queue) + self._in_hand, len(self._held))

    @property
    def health(self) -> LinkHealth | None:
        """How the link to the broker is doing; None while there is none."""
        return self._hub.health(self._settings.broker)

    def open(self) -> None:
        """Begin to listen; returns at once, for a broker that is away comes back by itself."""
        with self._changed:
            self._open = True
        self._hub.open(self._settings.broker, self._topic)

    def read(self, timeout_s: float) -> Block | None:
        """
        Return the next block, or None where none came within *timeout_s*.

        Raises:
            OutOfReachError: the link's thread has ended; the source wants to be closed and opened again.

            RuntimeError: the source is not open.
        """
        if not self._open:
            raise RuntimeError(f"source {self._name} is not open")
        give_up_s = time.monotonic() + timeout_s
        while True:
            arrival = self._take(max(0.0, give_up_s - time.monotonic()))
            if arrival is None:
                if self._hub.broken(self._settings.broker):
                    raise OutOfReachError(f"sources.{self._name}: the link to its broker has ended (open it again)")
                return None
            block = self._judge(arrival)
            if block is not None or time.monotonic() >= give_up_s:
                return block

    def close(self) -> None:
        """Listen no more. May be called twice; what is queued can be read when the source is open again."""
        with self._changed:
            self._open = False
        self._hub.close(self._settings.broker, self._topic)

    def rest(self) -> list[Block]:
        """Return what was acknowledged and not read by the time the source was closed; nobody sends it again."""
        blocks = []
        while (arrival := self._take(0.0)) is not None:
            block = self._judge(arrival)
            if block is not None:
                blocks.append(block)
        return blocks

    def receive(self, message: Message) -> None:
        """Take *message*, in the link's thread."""
        arrival = _Arrival(message, self._clock(), self._utc_ns())
        with self._changed:
            if self._comes_again(message):
                return
            if not self._held and self._has_room(message):
                self._admit(arrival)
                return
            if message.qos:
                if len(self._held) >= HELD_MESSAGES or self._held_bytes + len(message.payload) > QUEUE_BYTES:
                    raise NoRoomError
                self._held.append(arrival)
                self._held_bytes += len(message.payload)
                return
            # The broker has no copy of a message of QoS 0.
            self._tally.receive()
            first = self._tally.drop("queue_full")
        if first:
            self._tell("queue_full", "the queue is full and the broker cannot wait (publish with QoS 1)")

    def _comes_again(self, message: Message) -> bool:
        # What is held is kept over a lost connection, for the broker may have lost it as well. Where it has not, the
        # new copy is the one that can be acknowledged.
        for index, held in enumerate(self._held):
            older = held.message.connection != message.connection
            if older and held.message.payload == message.payload:
                self._held[index] = dataclasses.replace(held, message=message)
                return True
        return False

    def _take(self, timeout_s: float) -> _Arrival | None:
        with self._changed:
            if not self._changed.wait_for(lambda: self._queue, timeout_s):
                return None
            arrival = self._queue.popleft()
            self._queue_bytes -= len(arrival.message.payload)
            self._in_hand += 1
            while self._held and self._has_room(self._held[0].message):
                self._held_bytes -= len(self._held[0].message.payload)
                self._admit(self._held.popleft())
            return arrival

    def _has_room(self, message: Message) -> bool:
        fits = self._queue_bytes + len(message.payload) <= QUEUE_BYTES
        return not self._queue or (len(self._queue) < self._settings.queue_blocks and fits)

    def _admit(self, arrival: _Arrival) -> None:
        self._queue.append(arrival)
        self._queue_bytes += len(arrival.message.payload)
        self._tally.receive()
        self._changed.notify()
        self._hub.ack(self._settings.broker, arrival.message)

    def _judge(self, arrival: _Arrival) -> Block | None:
        block = None
        reason, text = "retained", "the broker had kept it (publish blocks without the retain flag)"
        if not arrival.message.retained:
            try:
                block = decode(arrival.message.payload, self._name)
            except BlockError as error:
                reason, text = error.reason, str(error)
            else:
                reason, text = self._objection(block, arrival.came_ns)
        with self._changed:
            self._in_hand -= 1
            first = bool(reason) and self._tally.drop(reason)
            if not reason:
                self._tally.accept(arrival.came_s)
        if first:
            self._tell(reason, text)
        if block is None or reason:
            return None
        self._repeats.remember(block.boot, block.seq)
        return dataclasses.replace(block, full_scale=self._settings.full_scale)

    def _objection(self, block: Block, came_ns: int) -> tuple[str, str]:
        settings = self._settings
        if settings.rate_hz is not None and block.rate_hz != settings.rate_hz:
            return "other_rate", f"{block.rate_hz:g} Hz are not {settings.rate_hz:g} Hz (correct sender or rate_hz)"
        if settings.unit is not None and block.unit is not settings.unit:
            return "other_unit", f"the unit is {block.unit}, not {settings.unit} (correct sender or unit)"
        seen = self._repeats.judge(block.boot, block.seq)
        if seen is not None:
            return seen, f"number {block.seq} came before (a sender that restarts must change boot)"
        age_s = (came_ns - block.end_ns) / 1e9
        if settings.max_age_s and age_s > settings.max_age_s:
            return "late", f"it ended {age_s:.0f} s ago (set the sender's clock, or raise max_age_s)"
        return "", ""

    def _tell(self, reason: str, text: str) -> None:
        self._note("block_dropped", source=self._name, reason=reason, text=text)
