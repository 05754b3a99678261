import itertools
from typing import Any

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from pydantic import ValidationError

from humbell.model import Block, OutOfReachError, SampleUnit
from humbell.sources import MqttHub, MqttSettings, MqttSource
from humbell.wire import BrokerSettings, Message, NoRoomError, encode

SECOND_NS = 1_000_000_000
NOW_NS = 1_772_359_200 * SECOND_NS  # 2026-03-01T10:00:00Z
TOPIC = "humbell/blocks/wifi-1"


class Desk(MqttHub):
    """Hands over what a test hands in, and keeps what is acknowledged."""

    def __init__(self) -> None:
        super().__init__({"local": BrokerSettings(host="broker")}, "humbell-test", note=_silent)
        self.acked: list[tuple[int, int]] = []
        self.gone = False

    def open(self, broker: str, topic: str) -> None:
        """Do nothing."""

    def close(self, broker: str, topic: str) -> None:
        """Do nothing."""

    def broken(self, broker: str) -> bool:  # noqa: ARG002 - there is one
        """Return what the test says."""
        return self.gone

    def ack(self, broker: str, message: Message) -> None:  # noqa: ARG002 - the same
        """Keep what is acknowledged."""
        self.acked.append((message.connection, message.mid))


def _silent(_event: str, /, **_fields: object) -> None:
    pass


class Bench:
    """
    A source without a broker.

    Args:
        settings: of the source.
    """

    def __init__(self, **settings: object) -> None:
        self.desk = Desk()
        self.now_s = 1000.0
        self.utc_ns = NOW_NS
        self.told: list[dict[str, object]] = []
        self.source = MqttSource(
            "wifi-1",
            MqttSettings.model_validate({"kind": "mqtt", "broker": "local", **settings}),
            self.desk,
            note=self._note,
            utc_ns=lambda: self.utc_ns,
            clock=lambda: self.now_s,
        )
        self.source.open()
        self._mids = itertools.count(1)

    def _note(self, _event: str, /, **fields: object) -> None:
        self.told.append(fields)

    def give(self, payload: bytes, *, qos: int = 1, retained: bool = False, connection: int = 1) -> int:
        """Hand in a message; return its number."""
        mid = next(self._mids)
        self.source.receive(Message(TOPIC, payload, qos, retained, connection, mid))
        return mid

    def read(self) -> list[int]:
        """Return the numbers of all blocks that can be read now."""
        found = []
        while self.source.counters.queued:
            one = self.source.read(0.0)
            if one is not None:
                found.append(one.seq)
        return found


def payload(seq: int, start_ns: int = NOW_NS, **changes: Any) -> bytes:  # noqa: ANN401 - of several types
    made = Block("wifi-1", changes.pop("boot", "b"), seq, start_ns, 100.0, SampleUnit.G, np.zeros((1, 100), np.int16))
    return encode(made)


def test_the_settings_left_out_are_these() -> None:
    """One minute of age, 64 blocks in the queue, and no expectations."""
    settings = MqttSettings(kind="mqtt", broker="local")
    assert settings.model_dump(exclude={"kind", "broker"}) == {
        "topic": None,
        "max_age_s": 60.0,
        "queue_blocks": 64,
        "unit": None,
        "full_scale": None,
        "rate_hz": None,
    }


@pytest.mark.parametrize(
    "wrong",
    [
        *({"topic": one} for one in ("", "a/+/b", "a/#", "#", "$SYS/x", "a\x00", "x" * 257)),
        *({"broker": one} for one in ("", "Local", "a b", None)),
        *({"max_age_s": one} for one in (-1, float("nan"), float("inf"))),
        *({"queue_blocks": one} for one in (0, 4097, 1.5)),
        *({"rate_hz": one} for one in (0, 0.5, 512_001)),
        *({"full_scale": one} for one in (0, -1, float("inf"))),
        {"unit": "mm/s"},
        {"qos": 2},
    ],
)
def test_settings_that_cannot_be_are_refused(wrong: dict[str, object]) -> None:
    """One source has one topic, so wildcards are none."""
    with pytest.raises(ValidationError):
        MqttSettings.model_validate({"kind": "mqtt", "broker": "local", **wrong})


def test_a_block_that_comes_too_late_is_dropped_and_counted() -> None:
    """Its age is that of its last sample when it comes in, however long it then waits to be read."""
    bench = Bench(max_age_s=60)
    bench.give(payload(0, NOW_NS - 61 * SECOND_NS))
    bench.give(payload(1, NOW_NS - 61 * SECOND_NS - 1))
    bench.give(payload(2, NOW_NS + 3600 * SECOND_NS))
    bench.utc_ns += 3600 * SECOND_NS
    assert bench.read() == [0, 2]
    assert bench.source.counters.dropped == {"late": 1}
    assert bench.told == [
        {
            "source": "wifi-1",
            "reason": "late",
            "text": "it ended 60 s ago (set the sender's clock, or raise max_age_s)",
        }
    ]


def test_without_a_limit_blocks_of_any_age_are_measured() -> None:
    """0 switches the limit off, for senders without a clock."""
    bench = Bench(max_age_s=0)
    bench.give(payload(0, 0))
    assert bench.read() == [0]


def test_a_late_block_that_comes_again_is_late_again() -> None:
    """Only what was measured counts as seen."""
    bench = Bench(max_age_s=60)
    for _ in range(2):
        bench.give(payload(0, 0))
    bench.give(payload(0))
    assert bench.read() == [0]
    assert bench.source.counters.dropped == {"late": 2}


def test_a_message_is_acknowledged_when_it_has_its_place_in_the_queue() -> None:
    """Not before: until then the broker's copy is the only safe one."""
    bench = Bench(queue_blocks=2)
    mids = [bench.give(payload(seq)) for seq in range(5)]
    assert bench.desk.acked == [(1, mid) for mid in mids[:2]]
    for done in range(1, 4):
        block = bench.source.read(0.0)
        assert block is not None
        assert block.seq == done - 1
        assert bench.desk.acked == [(1, mid) for mid in mids[: 2 + done]]
    assert bench.read() == [3, 4]
    assert bench.source.counters.dropped == {}


def test_what_was_acknowledged_can_be_had_after_the_end() -> None:
    """The broker has forgotten it, so it must not be forgotten here."""
    bench = Bench()
    for seq in (0, 1, 1):
        bench.give(payload(seq))
    bench.source.close()
    assert [block.seq for block in bench.source.rest()] == [0, 1]
    assert bench.source.rest() == []
    assert bench.source.counters.balanced


def test_what_is_held_is_acknowledged_on_the_connection_in_force() -> None:
    """After a reconnect the broker sends it again under another number; it is measured once, in its place."""
    bench = Bench(queue_blocks=1)
    for seq in range(3):
        bench.give(payload(seq))
    again = [bench.give(payload(seq), connection=2) for seq in (1, 2)]
    late = bench.give(payload(3), connection=2)
    assert bench.source.counters.held == 3
    assert bench.read() == [0, 1, 2, 3]
    assert bench.desk.acked[1:] == [(2, again[0]), (2, again[1]), (2, late)]
    assert bench.source.counters.dropped == {}


def test_two_equal_messages_on_one_connection_are_two() -> None:
    """Each wants its own acknowledgement."""
    bench = Bench(queue_blocks=1)
    mids = [bench.give(payload(seq)) for seq in (0, 1, 1)]
    assert bench.read() == [0, 1]
    assert bench.desk.acked == [(1, mid) for mid in mids]
    assert bench.source.counters.dropped == {"duplicate": 1}


def test_what_can_be_held_is_bounded(monkeypatch: pytest.MonkeyPatch) -> None:
    """In number and in bytes; the message that finds no room is left to the broker, and counted nowhere."""
    size = len(payload(0))
    monkeypatch.setattr("humbell.sources.mqtt.QUEUE_BYTES", 3 * size)
    bench = Bench(queue_blocks=64)
    for seq in range(6):
        bench.give(payload(seq))
    with pytest.raises(NoRoomError):
        bench.give(payload(6))
    assert (bench.source.counters.queued, bench.source.counters.held) == (3, 3)
    monkeypatch.setattr("humbell.sources.mqtt.QUEUE_BYTES", 1000 * size)
    monkeypatch.setattr("humbell.sources.mqtt.HELD_MESSAGES", 3)
    with pytest.raises(NoRoomError):
        bench.give(payload(6))
    assert bench.source.counters.received == 3
    assert bench.read() == list(range(6))
    bench.give(payload(6))
    assert bench.read() == [6]


def test_a_block_larger_than_the_queue_passes_an_empty_one(monkeypatch: pytest.MonkeyPatch) -> None:
    """It would otherwise wait for ever."""
    monkeypatch.setattr("humbell.sources.mqtt.QUEUE_BYTES", 10)
    bench = Bench()
    bench.give(payload(0))
    assert bench.read() == [0]


def test_the_age_of_the_last_block_counts_from_when_it_came() -> None:
    """Silence of the sender shows, whatever the broker does; what was dropped is no sign of life."""
    bench = Bench()
    assert bench.source.counters.last_block_age_s is None
    bench.give(payload(0))
    bench.now_s += 5
    assert bench.read() == [0]
    assert bench.source.counters.last_block_age_s == 5
    bench.give(b"no block")
    bench.now_s += 5
    assert bench.read() == []
    assert bench.source.counters.last_block_age_s == 10


def test_reading_gives_up_in_time_though_nothing_good_comes() -> None:
    """What is dropped does not keep the reader."""
    bench = Bench()
    for _ in range(5):
        bench.give(b"no block")
    for left in range(4, -1, -1):
        assert bench.source.read(0.0) is None
        assert bench.source.counters.queued == left
    assert bench.source.read(0.01) is None


def test_a_source_that_is_not_open_is_not_read() -> None:
    """What is in its queue stays there for the next time it is opened."""
    bench = Bench()
    bench.give(payload(0))
    bench.source.close()
    bench.source.close()
    with pytest.raises(RuntimeError, match="source wifi-1 is not open"):
        bench.source.read(0.0)
    bench.source.open()
    assert bench.read() == [0]


def test_a_link_that_has_ended_by_itself_is_told() -> None:
    """Its thread never ends unless it is told to; should it, the source wants to be opened anew."""
    bench = Bench()
    bench.desk.gone = True
    bench.give(payload(0))
    assert bench.read() == [0]
    with pytest.raises(OutOfReachError, match=r"sources\.wifi-1: the link to its broker has ended"):
        bench.source.read(0.0)


@given(st.lists(st.sampled_from(["good", "again", "broken", "retained", "qos0", "read"]), max_size=60))
def test_what_comes_in_is_measured_or_dropped_or_waits(steps: list[str]) -> None:
    """Received = accepted + dropped + queued, at every moment; each number is measured once; no message is lost."""
    bench, read, seq, given_ = Bench(queue_blocks=3), [], 0, 0
    for step in steps:
        if step == "read":
            block = bench.source.read(0.0)
            read += [] if block is None else [block.seq]
            continue
        seq += step in {"good", "qos0"}
        given_ += 1
        bench.give(
            b"no block" if step == "broken" else payload(seq),
            qos=0 if step == "qos0" else 1,
            retained=step == "retained",
        )
        assert bench.source.counters.balanced
        assert bench.source.counters.received + bench.source.counters.held == given_
    while bench.source.counters.queued:
        block = bench.source.read(0.0)
        read += [] if block is None else [block.seq]
    assert len(read) == len(set(read)) == bench.source.counters.accepted
    assert bench.source.counters.balanced
    assert bench.source.counters.received == given_
