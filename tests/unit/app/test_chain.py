"""The chain: blocks in, readings and transitions out; what happens where blocks do not join up."""

from collections.abc import Iterable
from dataclasses import replace
from itertools import pairwise

import numpy as np
import pytest
from numpy.typing import NDArray

from humbell.app.chain import Chain
from humbell.app.line import SignalKind
from humbell.config import parse
from humbell.model import AlarmId, Block, Cause, ConfigError, LifeCycle, Quality, Reading, SampleUnit, Transition

SITE = parse(
    """\
site: tarnholm-water
sources: {tape: {kind: replay}, other: {kind: replay}}
machines:
  p-101:
    points:
      de-h:
        channel: tape/0
        velocity: {band_hz: [10, 200], high: 4.5, on_delay_s: 4, off_delay_s: 4}
        acceleration: off
  p-102:
    points:
      de-h:
        channel: other/0
        sensitivity: {mV_per_g: 100}
        velocity: {band_hz: [10, 200]}
        acceleration: off
""",
    "node.yaml",
)
RATE_HZ = 512.0
SECOND_NS = 1_000_000_000
START_NS = 1_772_359_200_000_000_000  # 2026-03-01T10:00:00Z


def vibration(seconds: float, rms_mm_s: float = 6.0, rate_hz: float = RATE_HZ) -> NDArray[np.float64]:
    """Return (1, n) m/s²: 40 Hz of that velocity, and a little noise, without which a sensor is none."""
    time_s = np.arange(round(seconds * rate_hz)) / rate_hz
    wave = np.sqrt(2) * rms_mm_s / 1000 * 2 * np.pi * 40 * np.cos(2 * np.pi * 40 * time_s)
    return np.asarray(wave + np.random.default_rng(5).normal(0, 0.01, time_s.size))[None, :]


def cut(samples: NDArray[np.float64], length: int = 128, rate_hz: float = RATE_HZ) -> list[Block]:
    """Return *samples* as blocks of *length*, one right behind the other."""
    return [
        Block(
            source="tape",
            boot="a",
            seq=number,
            start_ns=START_NS + round(at * SECOND_NS / rate_hz),
            rate_hz=rate_hz,
            unit=SampleUnit.METRES_PER_SECOND_SQUARED,
            samples=samples[:, at : at + length],
        )
        for number, at in enumerate(range(0, samples.shape[1], length))
    ]


def later(block: Block, seconds: float, **changes: object) -> Block:
    """Return *block* as one that begins *seconds* after the beginning of all."""
    return replace(block, start_ns=START_NS + round(seconds * SECOND_NS), **changes)  # type: ignore[arg-type]


def name(alarm: AlarmId, time_ns: int) -> str:
    """Name an occurrence after its alarm and second."""
    return f"{alarm.name}@{seconds_of(time_ns):g}"


def run(blocks: Iterable[Block], source: str = "tape") -> list[Reading | Transition]:
    """Return all that comes of *blocks* and of the end behind them."""
    chain = Chain(SITE, name)
    told = [one for block in blocks for one in chain.feed(block)]
    return told + list(chain.end(source))


def velocities(told: Iterable[Reading | Transition]) -> list[Reading]:
    """Return the readings."""
    return [one for one in told if isinstance(one, Reading)]


def seconds_of(time_ns: int) -> float:
    """Return *time_ns* in seconds after the beginning."""
    return (time_ns - START_NS) / SECOND_NS


def lived(told: Iterable[Reading | Transition]) -> list[tuple[float, float, str]]:
    """Return end, span and cause of each reading."""
    return [(round(seconds_of(one.time_ns), 3), round(one.span_s, 3), one.cause or "good") for one in velocities(told)]


def raises(told: Iterable[Reading | Transition]) -> list[float]:
    """Return when alarms were raised."""
    return [
        seconds_of(one.time_ns)
        for one in told
        if isinstance(one, Transition) and one.after is LifeCycle.UNACKNOWLEDGED is not one.before
    ]


UNBROKEN = [(1, 1, "settling"), *[(second, 1, "good") for second in range(2, 11)]]


def test_an_unbroken_stream_is_a_value_a_second() -> None:
    """After the second in which the filter settles each is good and right, and the alarm comes after its delay."""
    told = run(cut(vibration(10)))
    assert lived(told) == UNBROKEN
    assert [one.value for one in velocities(told)[1:]] == pytest.approx([6.0] * 9, rel=0.01)
    assert raises(told) == [5.0]


@pytest.mark.parametrize("length", [1, 7, 100, 1000, 5120])
def test_how_the_stream_was_cut_leaves_no_trace(length: int) -> None:
    """To the last bit: the same readings and transitions, in the same order."""
    assert run(cut(vibration(10), length)) == run(cut(vibration(10)))


def test_each_reading_is_followed_by_what_it_causes() -> None:
    """A transition has the time and value of the reading before it."""
    told = run(cut(vibration(10)))
    pairs = [(before, one) for before, one in pairwise(told) if isinstance(one, Transition)]
    assert len(pairs) == 2
    for before, one in pairs:
        assert isinstance(before, Reading)
        assert (before.time_ns, before.value) == (one.time_ns, one.value)


def test_a_gap_is_told_and_bridged_by_nothing() -> None:
    """What waited for its frame and what is missing are lost together; then the filter settles anew, and the delay."""
    blocks = cut(vibration(14))
    told = run(blocks[:18] + blocks[26:])
    assert lived(told) == [
        *UNBROKEN[:4],
        (6.5, 2.5, "no_samples"),
        (7.5, 1, "settling"),
        *[(second + 0.5, 1, "good") for second in range(8, 14)],
        (14, 0.5, "incomplete"),
    ]
    assert raises(told) == [11.5]


def test_a_new_run_of_the_sender_is_a_gap_as_long_as_it_took() -> None:
    """Numbers begin anew with another boot; the time between the two runs is lost, and told."""
    first, second = cut(vibration(3)), cut(vibration(4))
    told = run([*first, *(later(one, 5 + number / 4, boot="b") for number, one in enumerate(second))])
    assert lived(told) == [
        *UNBROKEN[:3],
        (5, 2, "no_samples"),
        (6, 1, "settling"),
        *[(end, 1, "good") for end in (7, 8, 9)],
    ]


def test_a_new_run_right_behind_the_old_one_loses_nothing() -> None:
    """Nothing is missing, so nothing is told as missing, but the filter starts anew."""
    blocks = cut(vibration(6))
    told = run([*blocks[:12], *(replace(one, boot="b") for one in blocks[12:])])
    assert lived(told) == [*UNBROKEN[:3], (4, 1, "settling"), (5, 1, "good"), (6, 1, "good")]


def test_a_block_that_comes_behind_its_successors_changes_nothing() -> None:
    """Its place was a gap when they came, and stays one: nothing is filtered out of order."""
    blocks = cut(vibration(10))
    lost = blocks[:5] + blocks[6:]
    assert run([*blocks[:5], *blocks[6:9], blocks[5], *blocks[9:]]) == run(lost)


def test_blocks_that_come_twice_change_nothing() -> None:
    """A broker delivers again what it is not sure of: the same block, at once or later, is used once."""
    blocks = cut(vibration(10))
    again = [blocks[0], blocks[0], *blocks[1:9], blocks[3], *blocks[9:20], blocks[2], *blocks[20:], blocks[-1]]
    assert run(again) == run(blocks)


def test_another_rate_in_the_middle_starts_anew() -> None:
    """What waited for the rest of its frame is told as incomplete, and the rest measured at its own rate."""
    slow, fast = cut(vibration(3.5)), cut(vibration(4, rate_hz=1024), rate_hz=1024)
    told = run([*slow, *(later(one, 3.5 + number / 8, seq=one.seq + 14) for number, one in enumerate(fast))])
    assert lived(told) == [
        *UNBROKEN[:3],
        (3.5, 0.5, "incomplete"),
        (4.5, 1, "settling"),
        *[(end + 0.5, 1, "good") for end in (5, 6, 7)],
    ]
    assert velocities(told)[-1].value == pytest.approx(6.0, rel=0.01)


@pytest.mark.parametrize(
    ("unit", "factor", "full_scale"),
    [(SampleUnit.G, 1 / 9.80665, None), (SampleUnit.METRES_PER_SECOND_SQUARED, 1.0, 50.0)],
)
def test_another_unit_or_range_in_the_middle_starts_anew(
    unit: SampleUnit, factor: float, full_scale: float | None
) -> None:
    """Numbers and times run on, but what was g is m/s² now: no sample of either is lost, or taken for the other."""
    blocks = cut(vibration(7.5))
    changed = [replace(one, unit=unit, samples=one.samples * factor, full_scale=full_scale) for one in blocks[14:]]
    told = run([*blocks[:14], *changed])
    assert lived(told) == [
        *UNBROKEN[:3],
        (3.5, 0.5, "incomplete"),
        (4.5, 1, "settling"),
        *[(end + 0.5, 1, "good") for end in (5, 6, 7)],
    ]
    assert velocities(told)[-1].value == pytest.approx(6.0, rel=0.01)


def test_a_piece_behind_a_stream_comes_behind_it() -> None:
    """The stream's last frame is told before the piece, however long it waited, and its rest before the piece, too."""
    stream = cut(vibration(3.5))
    pieces = [later(cut(vibration(2), 1024)[0], 3.5 + 600 * number, seq=14 + number, piece=True) for number in (0, 1)]
    more = [later(one, 2000 + number / 4, seq=20 + number) for number, one in enumerate(cut(vibration(2)))]
    told = run([*stream, *pieces, *more])
    assert lived(told) == [
        *UNBROKEN[:3],
        (3.5, 0.5, "incomplete"),
        (5.5, 2, "good"),
        (605.5, 2, "good"),
        (2001, 1, "settling"),
        (2002, 1, "good"),
    ]
    assert [one.piece for one in velocities(told)] == [False] * 4 + [True] * 2 + [False] * 2


@pytest.mark.parametrize(
    ("first", "waited"), [(14, (3.5, 0.5, "incomplete")), (20, (3.5, 2.0, "no_samples"))], ids=["whole", "blocks lost"]
)
def test_a_clock_that_goes_back_turns_no_time_round(first: int, waited: tuple[float, float, str]) -> None:
    """What waited, and blocks that are missing, are told where the clock stood, not at the time of what follows."""
    blocks = cut(vibration(3.5))
    told = run([*blocks, *(later(one, 1 + number / 4, seq=first + number) for number, one in enumerate(blocks))])
    assert lived(told)[:5] == [*UNBROKEN[:3], waited, (2, 1, "settling")]


def test_the_end_tells_what_never_became_a_frame() -> None:
    """The rest of a recording is told as incomplete; a source that never spoke has nothing to tell."""
    assert lived(run(cut(vibration(1.25)))) == [(1, 1, "settling"), (1.25, 0.25, "incomplete")]
    assert run([]) == []


def test_sources_do_not_disturb_each_other() -> None:
    """Each has its own numbers, filters and gaps."""
    blocks = cut(vibration(5))
    volts = [
        replace(one, source="other", unit=SampleUnit.VOLT, samples=one.samples / 98.0665)
        for one in cut(vibration(5, 3.0))
    ]
    chain = Chain(SITE, name)
    told = [
        one
        for number, (mine, other) in enumerate(zip(blocks, volts, strict=True))
        for block in ([mine, other] if number != 9 else [mine])
        for one in chain.feed(block)
    ]
    told += [*chain.end("tape"), *chain.end("other")]
    assert [one for one in told if isinstance(one, Transition) or one.machine == "p-101"] == run(blocks)
    others = [one for one in velocities(told) if one.machine == "p-102"]
    assert [one.cause for one in others].count(Cause.NO_SAMPLES) == 1
    assert [one.value for one in others if one.quality is Quality.GOOD] == pytest.approx([3.0] * 2, rel=0.01)


@pytest.mark.parametrize(
    ("kind", "said"),
    [
        (SignalKind(RATE_HZ, SampleUnit.G, 1, None), None),
        (
            SignalKind(RATE_HZ, SampleUnit.VOLT, 1, None),
            "p-101.points.de-h.sensitivity: samples in V need a sensitivity",
        ),
        (
            SignalKind(500.0, SampleUnit.G, 1, None),
            "p-101.points.de-h.velocity.band_hz: 500 Hz carries a band up to 195.3",
        ),
        (SignalKind(RATE_HZ, SampleUnit.G, 0, None), "p-101.points.de-h.channel: tape/0 does not exist"),
    ],
)
def test_a_signal_is_tried_before_it_comes(kind: SignalKind, said: str | None) -> None:
    """A missing channel or sensitivity, or a rate too low, is told before the first block, with the path to mend."""
    chain = Chain(SITE, name)
    if said is None:
        chain.prepare("tape", kind)
        return
    with pytest.raises(ConfigError) as caught:
        chain.prepare("tape", kind)
    assert caught.value.problems[0].startswith(f"machines.{said}")
