"""The measures' task: blocks in, batches out; silence told, commands done in its own thread, bad blocks counted."""

import math
import time
from collections.abc import Callable
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass, field, replace
from types import SimpleNamespace
from typing import Any, cast

import numpy as np
import pytest
from structlog.testing import capture_logs

from humbell.alarms import Event
from humbell.app import measuring as module
from humbell.app.board import Board
from humbell.app.chain import Chain
from humbell.app.intake import Intake
from humbell.app.keeper import Batch
from humbell.app.measuring import SILENCE_S, Measuring
from humbell.app.queues import BoundedQueue
from humbell.config import parse
from humbell.model import AlarmId, AlarmType, Block, Cause, LifeCycle, Measure, Moment, PointId, SampleUnit

SITE = parse(
    """\
site: tarnholm-water
sources: {tape: {kind: replay}}
machines:
  p-101:
    points:
      de-h:
        channel: tape/0
        velocity: {band_hz: [10, 200], high: 4.5, on_delay_s: 2, off_delay_s: 2}
        acceleration: off
""",
    "node.yaml",
)
ALARM = AlarmId("p-101", "de-h", Measure.VELOCITY_RMS, AlarmType.HIGH)
START_NS = 1_772_359_200_000_000_000  # 2026-03-01T10:00:00Z
SECOND_NS = 10**9
RATE_HZ = 512.0
LENGTH = 128
NOISE = np.random.default_rng(5).normal(0, 0.01, (1, LENGTH))


def block(seq: int, rms_mm_s: float = 6.0) -> Block:
    """Return a quarter of a second of 40 Hz, right behind the one with the number before."""
    wave = np.cos(2 * np.pi * 40 * np.arange(LENGTH) / RATE_HZ) * np.sqrt(2) * rms_mm_s / 1000 * 2 * np.pi * 40
    start_ns = START_NS + seq * SECOND_NS // 4
    return Block("tape", "a", seq, start_ns, RATE_HZ, SampleUnit.METRES_PER_SECOND_SQUARED, wave + NOISE)


@dataclass
class Bench:
    """A task with all that is around it, turned by hand, with a clock that stands still until it is set."""

    now_s: float = 0.0
    intake: SimpleNamespace = field(
        default_factory=lambda: SimpleNamespace(name="tape", ended=False, silent_s=0.0, rest=list)
    )
    batches: list[Batch] = field(default_factory=list)
    board: Board = field(default_factory=Board)
    blocks: BoundedQueue[Block] = field(default_factory=lambda: BoundedQueue("blocks", 99))

    def __post_init__(self) -> None:
        """Put it together."""
        chain = Chain(SITE, lambda alarm, time_ns: f"{alarm.name}@{time_ns}")
        chain.resume({}, START_NS)
        intakes = [cast("Intake", self.intake)]
        self.measuring = Measuring(chain, self.blocks, intakes, self.batches.append, self.board, self.moment)

    def moment(self) -> Moment:
        """Return the moment."""
        return Moment("boot", int(self.now_s * 1e9), START_NS + int(self.now_s * 1e9))

    def turn(self, times: int = 1) -> None:
        """Have the task do so many rounds."""
        for _ in range(times):
            assert cast("Any", self.measuring)._turn()  # noqa: SLF001 - instead of a thread and waiting

    def measure(self, *blocks: Block) -> None:
        """Have it measure *blocks*."""
        for one in blocks:
            assert self.blocks.put(one, 0.0)
        self.turn(len(blocks))

    @property
    def lived(self) -> list[tuple[float, float, Cause | None]]:
        """End, span and cause of every reading, in seconds after the start."""
        readings = [one for batch in self.batches for one in batch.readings]
        return [((one.time_ns - START_NS) / 1e9, one.span_s, one.cause) for one in readings]


@pytest.fixture
def bench(monkeypatch: pytest.MonkeyPatch) -> Bench:
    """A bench that waits for nothing."""
    made = Bench()
    monkeypatch.setattr(module, "_TURN_S", 0.0)
    monkeypatch.setattr(time, "monotonic_ns", lambda: 10**12 + int(made.now_s * 1e9))
    return made


def test_each_batch_holds_readings_transitions_and_the_states_behind_them(bench: Bench) -> None:
    """So that what is written together belongs together, and the board shows the same."""
    with capture_logs() as logs:
        bench.measure(*(block(seq) for seq in range(13)))
    assert bench.lived == [(1, 1, Cause.SETTLING), (2, 1, None), (3, 1, None)]
    assert [len(batch.transitions) for batch in bench.batches] == [0, 1, 1]
    ((raised, state),) = bench.batches[2].transitions
    assert (raised.after, state.life_cycle) == (LifeCycle.UNACKNOWLEDGED, LifeCycle.UNACKNOWLEDGED)
    assert bench.batches[2].states[ALARM] == state == bench.board.states[ALARM]
    assert bench.batches[1].states[ALARM].life_cycle is LifeCycle.NORMAL
    last = bench.board.readings[PointId("p-101", "de-h"), Measure.VELOCITY_RMS]
    assert last.reading is bench.batches[2].readings[-1]
    # That a value now stands behind it is a transition, too, but no line in the log.
    assert [(one["event"], one["after"]) for one in logs] == [("transition", LifeCycle.UNACKNOWLEDGED)]


def test_blocks_are_counted_as_measured_or_refused(bench: Bench) -> None:
    """Acquired = measured + dropped: a repeated block and a late one are not measured."""
    bench.measure(block(0), block(2), block(1), block(2), block(3))
    assert bench.measuring.measured_blocks == 3
    assert bench.measuring.unusable == {}


def test_a_block_that_cannot_be_measured_is_counted_and_told_once(bench: Bench) -> None:
    """Too low a rate for the band: said once, until a good block comes."""
    slow = [replace(block(seq), rate_hz=100.0) for seq in range(3)]
    with capture_logs() as logs:
        bench.measure(*slow)
        assert bench.measuring.unusable == {"tape": 3}
        assert "carries a band up to" in bench.measuring.troubles["tape"]
        assert bench.measuring.measured_blocks == 0
        bench.measure(block(40))
    assert bench.measuring.troubles == {}
    assert [one["event"] for one in logs] == ["blocks_unusable"]


def test_a_source_that_stays_silent_is_told_as_lost_and_once_in_the_log(bench: Bench) -> None:
    """First when it cannot be late any more, then every few seconds, up to now."""
    bench.measure(*(block(seq) for seq in range(8)))
    with capture_logs() as logs:
        for now_s in np.arange(2.0, 30.0, 0.5):
            bench.now_s = float(now_s)
            bench.intake.silent_s = bench.now_s - 2
            bench.turn()
    # The frame before was complete, and is told as such.
    assert bench.lived[:2] == [(1, 1, Cause.SETTLING), (2, 1, None)]
    lost = bench.lived[2:]
    assert [cause for _, _, cause in lost] == [Cause.NO_SAMPLES] * 3
    assert [end for end, _, _ in lost] == [17, 22, 27]
    assert math.fsum(span for _, span, _ in lost) == pytest.approx(25)
    assert SILENCE_S == 15
    assert [one["event"] for one in logs if one["event"] != "transition"] == ["source_silent"]
    # An alarm with nothing behind it says so.
    assert bench.board.states[ALARM].verified is False


def test_blocks_that_cannot_be_measured_are_as_good_as_none(bench: Bench) -> None:
    """Their seconds are told as lost, for nobody watches: the coverage must not look as if there were none."""
    with capture_logs() as logs:
        bench.measure(*(block(seq) for seq in range(4)))
        for seq in range(4, 4 * 22):
            bench.now_s = seq / 4
            bench.measure(replace(block(seq), rate_hz=100.0))
        bench.now_s = 22.0
        bench.measure(*(block(seq) for seq in range(4 * 22, 4 * 23 + 1)))
    assert bench.lived == [
        (1, 1, Cause.SETTLING),
        (16, 15, Cause.NO_SAMPLES),
        (21, 5, Cause.NO_SAMPLES),
        (22, 1, Cause.NO_SAMPLES),
        (23, 1, Cause.SETTLING),
    ]
    assert [one["event"] for one in logs] == ["blocks_unusable"]


def test_blocks_after_a_silence_go_on_where_it_was_told_to_end(bench: Bench) -> None:
    """What of them lies before that has been given up, and counts as late."""
    bench.measure(block(0))
    bench.now_s, bench.intake.silent_s = 16.0, 15.75
    with capture_logs():
        bench.turn()
        bench.intake.silent_s = 0.0
        bench.measure(*(block(seq) for seq in (4, 5, 64, 65, 66, 67, 68)))
    assert bench.measuring.measured_blocks == 6
    assert bench.lived == [
        (0.25, 0.25, Cause.INCOMPLETE),
        (16, 15.75, Cause.NO_SAMPLES),
        (17, 1, Cause.SETTLING),
    ]


def test_a_source_that_has_ended_is_no_silent_one(bench: Bench) -> None:
    """What waited for the rest of its frame is told, once."""
    bench.measure(*(block(seq) for seq in range(5)))
    bench.intake.ended, bench.intake.silent_s = True, 1000.0
    bench.turn(3)
    assert bench.lived == [(1, 1, Cause.SETTLING), (1.25, 0.25, Cause.INCOMPLETE)]


def in_time(bench: Bench, ask: Callable[[], object]) -> object:
    """Return what *ask*, in a thread of its own, gets from a task that is turned meanwhile."""
    with ThreadPoolExecutor(1) as pool:
        answer = pool.submit(ask)
        while not answer.done():
            bench.turn()
        return answer.result()


def test_a_command_is_done_between_two_blocks(bench: Bench) -> None:
    """Its transition is handed on to be written, and the board shows it."""
    with capture_logs() as logs:
        bench.measure(*(block(seq) for seq in range(13)))
        told = in_time(bench, lambda: bench.measuring.act(ALARM, Event.ACKNOWLEDGE, 5.0))
        assert [transition for transition, _ in bench.batches[-1].transitions] == [told]
        assert bench.board.states[ALARM].life_cycle is LifeCycle.ACKNOWLEDGED
        assert in_time(bench, lambda: bench.measuring.act(ALARM, Event.ACKNOWLEDGE, 5.0)) is None
    assert logs[-1]["after"] is LifeCycle.ACKNOWLEDGED


def test_a_command_for_an_alarm_that_is_not_there_is_an_error_of_the_caller(bench: Bench) -> None:
    """The task goes on."""
    with pytest.raises(KeyError):
        in_time(bench, lambda: bench.measuring.act(replace(ALARM, machine="p-9"), Event.ACKNOWLEDGE, 5.0))
    bench.measure(block(0))
    assert bench.measuring.measured_blocks == 1


def test_a_command_that_was_given_up_is_not_done_later(bench: Bench) -> None:
    """Who was told that it was not done must not find it done."""
    with capture_logs():
        bench.measure(*(block(seq) for seq in range(13)))
    with pytest.raises(TimeoutError):
        bench.measuring.act(ALARM, Event.ACKNOWLEDGE, 0.0)
    bench.turn()
    assert bench.board.states[ALARM].life_cycle is LifeCycle.UNACKNOWLEDGED


def test_the_end_measures_what_still_waits(bench: Bench) -> None:
    """No block that has come so far is lost by a stop, be it in our queue or still in the source's."""
    for seq in range(4):
        assert bench.blocks.put(block(seq), 0.0)
    bench.intake.rest = lambda: [block(4), block(5)]
    bench.measuring.finish()
    assert bench.lived == [(1, 1, Cause.SETTLING), (1.5, 0.5, Cause.INCOMPLETE)]
    assert bench.measuring.measured_blocks == 6
