"""The sender: nothing is lost, whatever its connections do."""

import threading
from collections import deque
from collections.abc import Iterable, Sequence

import pytest

from humbell.model import ConfigError, OutOfReachError
from humbell.wire import decode
from humbell_sim.blocks import Blocks
from humbell_sim.feeds import Answer, Link, Sender, run_all
from humbell_sim.settings import TarnholmSettings
from unit.simulator.pacing import Clock

START_NS = 1_772_359_200_000_000_000  # 2026-03-01T10:00:00Z
QUOTA_EXCEEDED, NOT_AUTHORIZED, NO_SUBSCRIBERS = 0x97, 0x87, 0x10  # MQTT 5.0, section 3.4.2.1


class FakeLink:
    """
    A connection that confirms one message a turn.

    Args:
        clock: that turns move.

        lives: messages that it takes before it is lost; None for ever.

        mute: never answers.

        codes: reason codes of its first answers; success from then on.
    """

    def __init__(
        self, clock: Clock, lives: int | None = None, *, mute: bool = False, codes: Iterable[int] = ()
    ) -> None:
        self.window = 4
        self.got: list[int] = []
        self.most = 0
        self.closed = False
        self._clock = clock
        self._lives = lives
        self._mute = mute
        self._codes = deque(codes)
        self._owed: deque[int] = deque()

    def publish(self, topic: str, payload: bytes) -> int:
        """Take a message."""
        assert topic == "humbell/blocks/sim"
        if self._lives is not None and len(self.got) >= self._lives:
            raise OutOfReachError("lost")
        self.got.append(decode(payload, "sim").seq)
        self._owed.append(len(self.got))
        self.most = max(self.most, len(self._owed))
        return len(self.got)

    def turn(self, timeout_s: float) -> Sequence[Answer]:
        """Answer one message, or let time pass."""
        if self._mute or not self._owed or (timeout_s == 0 and len(self._owed) < self.window):
            self._clock.now_s += timeout_s
            return ()
        code = self._codes.popleft() if self._codes else 0
        return [Answer(self._owed.popleft(), code, f"code {code:#x}")]

    def close(self) -> None:
        """Be closed."""
        self.closed = True


class Scene:
    """
    A sender, and the connections that it gets one after the other.

    Args:
        links: connections, or why there is none.

        seconds: of signal, in blocks of 0.25 s.

        pace: of it.
    """

    def __init__(
        self, clock: Clock, *links: FakeLink | Exception, seconds: float | None = 5.0, pace: float = 0.0
    ) -> None:
        self.stop = clock.event()
        self.told: list[str] = []
        self._links = deque(links)
        settings = TarnholmSettings(kind="tarnholm", channels=1, rate_hz=1000, pace=pace, seconds=seconds)
        blocks = Blocks("sim", settings, START_NS)
        self.sender = Sender(blocks, self._connect, self.stop, clock.monotonic, self.told.append)

    def _connect(self) -> Link:
        link = self._links.popleft()
        if isinstance(link, Exception):
            raise link
        return link

    @property
    def tally(self) -> tuple[int, int, int]:
        """Blocks sent, confirmed, resent."""
        tally = self.sender.tally
        return tally.sent, tally.confirmed, tally.resent


def test_all_blocks_are_sent_in_order_and_confirmed() -> None:
    """Twenty blocks go over one connection, which is then let go of."""
    clock = Clock()
    link = FakeLink(clock)
    scene = Scene(clock, link)
    scene.sender.run()
    assert link.got == list(range(20))
    assert scene.tally == (20, 20, 0)
    assert scene.sender.complete
    assert link.closed
    assert scene.told == []


def test_no_more_are_in_flight_than_the_link_allows() -> None:
    """Flat out, the sender waits for confirmations when the window is full."""
    clock = Clock()
    link = FakeLink(clock)
    Scene(clock, link).sender.run()
    assert link.most == 4


def test_blocks_are_sent_when_they_are_due() -> None:
    """At real time 5 s of signal take 5 s, to one turn."""
    clock = Clock()
    scene = Scene(clock, FakeLink(clock), pace=1.0)
    scene.sender.run()
    assert scene.sender.complete
    assert clock.now_s == pytest.approx(1005, abs=0.2)


def test_what_was_unconfirmed_is_sent_again_first_and_in_order() -> None:
    """A lost connection costs nothing but repetition: the receiver knows redelivered blocks by boot and number."""
    clock = Clock()
    first, second = FakeLink(clock, lives=7), FakeLink(clock)
    scene = Scene(clock, first, second)
    scene.sender.run()
    assert first.got == [0, 1, 2, 3, 4, 5, 6]
    confirmed = 7 - scene.tally[2]
    assert second.got == list(range(confirmed, 20))
    assert scene.tally == (20, 20, 7 - confirmed)
    assert 1 <= scene.tally[2] <= 4
    assert first.closed
    assert scene.sender.complete


def test_a_broker_that_is_away_is_tried_again_ever_less_often() -> None:
    """0.5 s, doubled up to 8 s, each told; a confirmation begins the count anew. Then what is due is caught up with."""
    clock = Clock()
    away = [OutOfReachError("away")] * 6
    scene = Scene(clock, *away, FakeLink(clock, lives=6), OutOfReachError("away"), FakeLink(clock), pace=1.0)
    scene.sender.run()
    assert clock.waits_s == [0.5, 1, 2, 4, 8, 8, 0.5, 1]
    assert scene.told[1] == "sim: away (trying again in 1 s)"
    assert len(scene.told) == 8
    assert scene.sender.complete
    assert clock.now_s == pytest.approx(1025, abs=0.5)


def test_a_link_that_never_answers_is_given_up() -> None:
    """Half a minute without any confirmation is a dead connection, whatever its state says."""
    clock = Clock()
    scene = Scene(clock, FakeLink(clock, mute=True), FakeLink(clock))
    scene.sender.run()
    assert scene.told == ["sim: no confirmation for 30 s (trying again in 0.5 s)"]
    assert scene.tally == (20, 20, 4)
    assert scene.sender.complete


def test_a_slow_source_is_no_dead_link() -> None:
    """Where nothing is owed, silence means nothing."""
    clock = Clock()
    scene = Scene(clock, FakeLink(clock), seconds=1, pace=0.005)
    scene.sender.run()
    assert scene.told == []
    assert scene.sender.complete


def test_a_refusal_for_good_ends_the_sender() -> None:
    """Not authorized today is not authorized in a second: it is told, and the feed is not complete."""
    clock = Clock()
    scene = Scene(clock, FakeLink(clock, codes=[0, NOT_AUTHORIZED]))
    scene.sender.run()
    assert scene.told == ["sim: block 1 was refused: code 0x87; giving up"]
    assert scene.tally[1] == 1
    assert not scene.sender.complete
    scene = Scene(clock, ConfigError("bad password"), seconds=None)
    scene.sender.run()
    assert scene.told == ["sim: bad password; giving up"]
    assert not scene.sender.complete


def test_a_refusal_for_now_is_tried_again() -> None:
    """A full broker may have room later; to have no subscriber is no refusal at all."""
    clock = Clock()
    scene = Scene(clock, FakeLink(clock, codes=[NO_SUBSCRIBERS, QUOTA_EXCEEDED]), FakeLink(clock))
    scene.sender.run()
    assert scene.told == ["sim: block 1 was refused: code 0x97 (trying again in 0.5 s)"]
    assert scene.tally[:2] == (20, 20)
    assert scene.sender.complete


class StoppingLink(FakeLink):
    """Stops the sender when it has taken five messages."""

    stop: threading.Event

    def publish(self, topic: str, payload: bytes) -> int:
        """Take a message, and at the fifth stop."""
        number = super().publish(topic, payload)
        if number == 5:
            self.stop.set()
        return number


@pytest.mark.parametrize(("seconds", "complete"), [(None, True), (5.0, False)])
def test_a_stop_sends_nothing_more_but_hears_what_is_owed(seconds: float | None, complete: bool) -> None:
    """An endless feed is stopped so, and is complete if all was confirmed; one with an end has not reached it."""
    clock = Clock()
    link = StoppingLink(clock)
    scene = Scene(clock, link, seconds=seconds)
    link.stop = scene.stop
    scene.sender.run()
    assert scene.tally == (5, 5, 0)
    assert scene.sender.complete is complete
    assert link.closed


def test_a_stop_does_not_wait_long_for_a_dead_broker() -> None:
    """Half a second is enough for answers that are on their way; without them the feed is not complete."""
    clock = Clock()
    link = StoppingLink(clock, mute=True)
    link.window = 8
    scene = Scene(clock, link, seconds=None)
    link.stop = scene.stop
    scene.sender.run()
    assert clock.now_s == pytest.approx(1000.5, abs=0.15)
    assert scene.tally == (5, 0, 0)
    assert not scene.sender.complete
    assert scene.told == []


def test_a_stop_ends_the_wait_for_a_broker() -> None:
    """Whoever waits to connect again stops at once, and is not complete: blocks were due."""
    clock = Clock()
    scene = Scene(clock, OutOfReachError("away"), seconds=None)
    scene.stop.set()
    scene.sender.run()
    assert clock.waits_s == []
    assert not scene.sender.complete


def test_many_senders_run_at_once_and_are_counted_together() -> None:
    """Each in a thread; the tally is the sum."""
    clocks = [Clock() for _ in range(5)]
    scenes = [Scene(clock, FakeLink(clock, lives=7), FakeLink(clock)) for clock in clocks]
    tally = run_all([scene.sender for scene in scenes], threading.Event())
    assert (tally.sent, tally.confirmed) == (100, 100)
    assert tally.resent == sum(scene.sender.tally.resent for scene in scenes)
    assert all(scene.sender.complete for scene in scenes)
