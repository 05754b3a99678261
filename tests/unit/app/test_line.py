"""One source's line: whatever comes, in whatever order, each second of a point is told exactly once."""

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from humbell.app.line import Line, SignalKind
from humbell.config import parse
from humbell.model import Block, Cause, ConfigError, PointId, Reading, SampleUnit

SITE = parse(
    """\
site: tarnholm-water
sources: {tape: {kind: replay}}
machines:
  p-101:
    points:
      de-h: {channel: tape/0, velocity: {band_hz: [10, 200]}, acceleration: off}
      nde-h: {channel: tape/1, velocity: {band_hz: [10, 200]}, acceleration: off}
""",
    "node.yaml",
)
POINT, OTHER = PointId("p-101", "de-h"), PointId("p-101", "nde-h")
START_NS = 1_772_359_200_000_000_000  # 2026-03-01T10:00:00Z
SECOND_NS = 10**9
RATE_HZ = 512.0
LENGTH = 128
BLOCK_S = 0.25
# Times are rounded to a nanosecond for each reading.
ROUNDED_S = 1e-6
SAMPLES = np.random.default_rng(5).normal(0, 1, (2, LENGTH))

Told = tuple[float, float, Cause | None]


def block(number: int, late_s: float = 0.0, **changes: object) -> Block:
    """Return the block that begins a quarter of a second times its number after the start, or later."""
    start_ns = START_NS + round((number * BLOCK_S + late_s) * SECOND_NS)
    made = Block("tape", "a", number, start_ns, RATE_HZ, SampleUnit.METRES_PER_SECOND_SQUARED, SAMPLES)
    return replace(made, **changes)  # type: ignore[arg-type]


def at(second: float) -> int:
    """Return a time in seconds after the start as UTC ns."""
    return START_NS + round(second * SECOND_NS)


def lived(readings: Sequence[Reading], point: PointId = POINT) -> list[Told]:
    """Return end, span and cause of the readings of one point, in seconds after the start."""
    return [
        (round((one.time_ns - START_NS) / SECOND_NS, 6), round(one.span_s, 6), one.cause)
        for one in readings
        if PointId(one.machine, one.point) == point
    ]


def resumed(ends_s: dict[PointId, float], started_s: float) -> Line:
    """Return a line that goes on from a journal."""
    line = Line(SITE, "tape")
    line.resume({point: at(end_s) for point, end_s in ends_s.items()}, at(started_s))
    return line


def fed(line: Line, *blocks: Block) -> list[Reading]:
    """Return what the line makes of *blocks* and of the end behind them."""
    return [one for each in blocks for one in line.feed(each)] + line.end()


def test_with_an_empty_journal_only_the_wait_for_the_first_block_is_lost() -> None:
    """Before the service ran for the first time nobody was to watch."""
    readings = fed(resumed({}, 0.0), *(block(seq) for seq in range(8, 16)))
    expected = [(2, 2, Cause.NO_SAMPLES), (3, 1, Cause.SETTLING), (4, 1, None)]
    assert lived(readings) == lived(readings, OTHER) == expected


def test_what_lies_before_the_start_of_the_service_was_its_fault_and_the_rest_was_not() -> None:
    """Down until it started, no samples until they came; each point from where its own readings end."""
    readings = fed(resumed({POINT: -60.0, OTHER: -62.0}, 0.0), *(block(seq) for seq in range(4, 12)))
    rest = [(1, 1, Cause.NO_SAMPLES), (2, 1, Cause.SETTLING), (3, 1, None)]
    assert lived(readings) == [(0, 60, Cause.DAEMON_DOWN), *rest]
    assert lived(readings, OTHER) == [(0, 62, Cause.DAEMON_DOWN), *rest]


def test_what_the_broker_had_kept_was_not_lost() -> None:
    """Blocks from before the start are measured; down was only what lies before the first of them."""
    readings = fed(resumed({POINT: -10.0, OTHER: -10.0}, 0.0), *(block(seq) for seq in range(-32, -24)))
    assert lived(readings) == [(-8, 2, Cause.DAEMON_DOWN), (-7, 1, Cause.SETTLING), (-6, 1, None)]


def test_what_is_committed_already_is_not_told_again() -> None:
    """Of redelivered blocks, those from before the end are late, and one across it is cut to the sample."""
    line = resumed({POINT: 1.1, OTHER: 1.1}, 1.5)
    readings = fed(line, *(block(seq) for seq in range(2, 12)))
    assert line.late_blocks == 2
    first_s = 1.1 + 0.001563  # the first sample at or after the end
    ((end_s, span_s, cause), *rest) = lived(readings)
    assert (end_s, span_s) == pytest.approx((first_s, 0.001563), abs=1e-5)
    assert cause is Cause.DAEMON_DOWN
    assert sum(span_s for _, span_s, _ in rest) == pytest.approx(3 - first_s, abs=1e-5)


def test_silence_is_told_up_to_now_and_again() -> None:
    """Before the first block as well as behind the last one, and never twice."""
    line = resumed({POINT: -5.0, OTHER: -5.0}, 0.0)
    assert lived(line.silence(at(15))) == [(0, 5, Cause.DAEMON_DOWN), (15, 15, Cause.NO_SAMPLES)]
    assert lived(line.silence(at(20))) == [(20, 5, Cause.NO_SAMPLES)]
    assert line.silence(at(20)) == line.silence(at(18)) == []
    readings = fed(line, *(block(seq) for seq in range(88, 96)))
    assert lived(readings) == [(22, 2, Cause.NO_SAMPLES), (23, 1, Cause.SETTLING), (24, 1, None)]


def test_blocks_of_a_time_that_was_given_up_are_late() -> None:
    """And counted: what has been told as lost stays lost."""
    line = Line(SITE, "tape")
    line.feed(block(0))
    assert lived(line.silence(at(10)))[-1] == (10, 9.75, Cause.NO_SAMPLES)
    assert [line.feed(block(seq)) for seq in (1, 2, 39)] == [[], [], []]
    assert (line.late_blocks, line.refused_blocks) == (3, 3)
    assert lived(fed(line, *(block(seq) for seq in range(40, 44)))) == [(11, 1, Cause.SETTLING)]


def test_time_never_goes_back_where_numbers_are_missing_and_the_senders_clock_was_set() -> None:
    """What is missing by its number is told where the account has got to, not before that."""
    line = Line(SITE, "tape")
    readings = fed(line, *(block(seq) for seq in range(8)), *(block(seq, late_s=-4.0) for seq in range(10, 14)))
    ends = [end_s for end_s, _, _ in lived(readings)][:3]
    assert ends == sorted(ends)
    assert lived(readings)[2] == (2, 0.5, Cause.NO_SAMPLES)


def test_a_repeated_and_a_late_block_are_refused() -> None:
    """Each is counted for its own reason, and together."""
    line = Line(SITE, "tape")
    fed(line, block(0), block(2), block(2), block(1))
    continuity = line.continuity
    assert (continuity.duplicate_blocks, continuity.late_blocks, line.late_blocks, line.refused_blocks) == (1, 1, 0, 2)


def test_a_block_that_cannot_be_measured_leaves_everything_as_it_is() -> None:
    """Nothing is told for it; the next good one tells what was missing."""
    line = Line(SITE, "tape")
    first = [one for seq in range(4) for one in line.feed(block(seq))]
    with pytest.raises(ConfigError, match="does not exist"):
        line.feed(block(4, samples=SAMPLES[:1]))
    rest = fed(line, *(block(seq) for seq in range(5, 9)))
    told = lived(first + rest)
    assert sum(span_s for _, span_s, _ in told) == pytest.approx(9 * BLOCK_S)
    assert told[-1][0] == 9 * BLOCK_S


def test_preparing_tells_whether_blocks_of_a_kind_can_be_measured() -> None:
    """Before the first one comes."""
    kind = SignalKind.of(block(0))
    assert Line(SITE, "tape").prepare(kind)
    with pytest.raises(ConfigError, match="carries a band up to"):
        Line(SITE, "tape").prepare(replace(kind, rate_hz=100.0))


@dataclass(frozen=True)
class Delivery:
    """
    One thing that may happen at a line.

    Args:
        what: ``block``, ``again`` (one of the last few), ``lost``, ``restart`` (of the sender), ``silence``.

        amount: of blocks that are lost, back to the one that comes again, or of quarters of a second of silence.
    """

    what: str
    amount: int


DELIVERIES = st.lists(
    st.builds(
        Delivery,
        st.sampled_from(["block", "block", "block", "again", "lost", "restart", "silence"]),
        st.integers(1, 30),
    ),
    max_size=60,
)


def play(line: Line, deliveries: Sequence[Delivery], first: int) -> list[Reading]:
    """Return what a line makes of *deliveries*, the first block of which has the number *first*."""
    readings: list[Reading] = []
    number, boot, base = first, 0, 0
    for one in deliveries:
        if one.what == "lost":
            number += one.amount
        elif one.what == "restart":
            # It counts from 0 again, and takes some time.
            number += one.amount
            boot, base = boot + 1, number
        elif one.what == "silence":
            number += one.amount
            readings += line.silence(at(number * BLOCK_S - 0.1))
        else:
            back = one.amount if one.what == "again" else 0
            sent = max(number - back, base)
            readings += line.feed(block(sent, seq=sent - base, boot=str(boot)))
            number += not back
    return readings + line.end()


@given(DELIVERIES, st.integers(0, 8), st.none() | st.floats(0.0, 10.0))
def test_each_second_is_told_exactly_once(deliveries: list[Delivery], first: int, down_s: float | None) -> None:
    """Whatever comes or does not: spans follow each other without a gap or an overlap, up to the end."""
    line = resumed({} if down_s is None else {POINT: -down_s, OTHER: -down_s}, 0.0)
    readings = play(line, deliveries, first)
    assert lived(readings) == lived(readings, OTHER)
    told_s = 0.0 if down_s is None else -down_s
    for end_s, span_s, _ in lived(readings):
        assert span_s > 0
        # A trimmed block begins with a whole sample.
        assert end_s - span_s == pytest.approx(told_s, abs=1 / RATE_HZ + ROUNDED_S)
        told_s = end_s
    spans = sum(span_s for _, span_s, _ in lived(readings))
    begin_s = 0.0 if down_s is None else -down_s
    assert spans == pytest.approx(told_s - begin_s, abs=len(readings) * ROUNDED_S + 1 / RATE_HZ)


@given(DELIVERIES)
def test_what_is_measured_came_and_came_once(deliveries: list[Delivery]) -> None:
    """No more seconds are measured than blocks were taken, and no fewer."""
    line = resumed({}, 0.0)
    readings = play(line, deliveries, 0)
    lost = {Cause.NO_SAMPLES, Cause.DAEMON_DOWN}
    used_s = sum(span_s for _, span_s, cause in lived(readings) if cause not in lost)
    assert used_s <= line.continuity.acquired_samples / RATE_HZ + ROUNDED_S * len(readings)


def test_pieces_are_told_by_themselves() -> None:
    """Between two of them nothing is missing: the sensor sleeps."""
    line = Line(SITE, "tape")
    pieces = [block(seq, late_s=600.0 * seq, piece=True) for seq in range(3)]
    told = lived(fed(line, *pieces))
    assert [span_s for _, span_s, _ in told] == [BLOCK_S] * 3
    assert Cause.NO_SAMPLES not in {cause for _, _, cause in told}
