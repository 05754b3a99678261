"""Which blocks join up, told block by block."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from humbell.model import Block, SampleUnit
from humbell.sources import Continuation, Continuity, Join

RATE_HZ = 1000.0
LENGTH = 250
BLOCK_NS = 250_000_000


def block(seq: int, start_ns: int | None = None, *, boot: str = "a", channels: int = 1, piece: bool = False) -> Block:
    """Return a block of a quarter of a second, right where its number says unless told otherwise."""
    return Block(
        source="s",
        boot=boot,
        seq=seq,
        start_ns=seq * BLOCK_NS if start_ns is None else start_ns,
        rate_hz=RATE_HZ,
        unit=SampleUnit.G,
        samples=np.zeros((channels, LENGTH)),
        piece=piece,
    )


def slow(seq: int, start_ns: int) -> Block:
    """Return a block at half the rate, half a second long."""
    return Block("s", "a", seq, start_ns, RATE_HZ / 2, SampleUnit.G, np.zeros((1, LENGTH)))


def joins(*blocks: Block) -> list[tuple[str, float]]:
    """Return join and missing seconds of each."""
    continuity = Continuity()
    return [(found.join, found.missing_s) for found in map(continuity.feed, blocks)]


def test_blocks_in_order_continue() -> None:
    """The first is FIRST, each next number that starts where the last one ended CONTINUES."""
    assert joins(block(7), block(8), block(9)) == [("first", 0.0), ("continues", 0.0), ("continues", 0.0)]


def test_a_number_left_out_is_a_gap_as_long_as_the_times_say() -> None:
    """Three blocks of 0.25 s are missing between numbers 0 and 4."""
    assert joins(block(0), block(4))[1] == ("gap", 0.75)
    assert joins(block(0), block(4, BLOCK_NS + 10**9))[1] == ("gap", 1.0)


def test_a_gap_without_a_time_is_as_long_as_the_blocks_that_are_missing() -> None:
    """A sender whose clock stood still, or went back, lost as many blocks as numbers are missing."""
    assert joins(block(0), block(4, BLOCK_NS))[1] == ("gap", 0.75)
    assert joins(block(0), block(4, 0))[1] == ("gap", 0.75)


def test_a_time_that_runs_away_is_a_gap_though_the_numbers_go_on() -> None:
    """A sender that drops samples inside itself shows it in time alone; backwards nothing is missing, nor joined."""
    assert joins(block(0), block(1, BLOCK_NS + 60_000_000))[1] == ("gap", 0.06)
    assert joins(block(0), block(1, BLOCK_NS - 60_000_000))[1] == ("gap", 0.0)


def test_jitter_within_the_tolerance_is_no_gap() -> None:
    """Senders stamp blocks some tens of ms early or late: 50 ms are allowed, and can be chosen."""
    assert joins(block(0), block(1, BLOCK_NS + 50_000_000))[1] == ("continues", 0.0)
    assert joins(block(0), block(1, BLOCK_NS - 50_000_000))[1] == ("continues", 0.0)
    strict = Continuity(tolerance_s=0.0)
    strict.feed(block(0))
    assert strict.feed(block(1, BLOCK_NS + 1)).join is Join.GAP


@pytest.mark.parametrize("ppm", [-200, 200])
def test_a_slow_drift_of_the_senders_clock_adds_up_to_no_gap(ppm: int) -> None:
    """At 200 ppm a day's drift is 17 s: each block is compared with the end of the last one, so it stays 50 µs."""
    continuity = Continuity()
    step_ns = BLOCK_NS + BLOCK_NS * ppm // 1_000_000
    found = [continuity.feed(block(seq, 10**18 + seq * step_ns)).join for seq in range(10_000)]
    assert set(found[1:]) == {Join.CONTINUES}
    assert continuity.missing_samples == 0


def test_a_repeated_block_is_a_duplicate_and_changes_nothing() -> None:
    """Redelivery is normal: a number that came within the last 256 blocks is dropped, and the stream goes on."""
    found = joins(block(0), block(1), block(1), block(0), block(2))
    assert [join for join, _ in found] == ["first", "continues", "duplicate", "duplicate", "continues"]


def test_a_block_that_was_overtaken_is_late_and_changes_nothing() -> None:
    """A lower number that has not been seen comes too late: its place has been counted as a gap."""
    found = joins(block(0), block(2), block(1), block(3))
    assert [join for join, _ in found] == ["first", "gap", "late", "continues"]


def test_what_is_remembered_of_numbers_is_bounded() -> None:
    """Behind the window a repetition is no longer known as one, and is late; either way it is dropped."""
    continuity = Continuity(window_blocks=4)
    for seq in range(6):
        continuity.feed(block(seq))
    assert continuity.feed(block(2)).join is Join.DUPLICATE
    assert continuity.feed(block(1)).join is Join.LATE
    none = Continuity(window_blocks=0)
    assert [none.feed(one).join for one in (block(1), block(1), block(2))] == ["first", "duplicate", "continues"]


def test_a_new_boot_id_is_a_restart_with_the_time_between_missing() -> None:
    """Numbers count within a run, so only the times tell how long the sender was away; backwards it is 0."""
    assert joins(block(9), block(0, 10 * BLOCK_NS + 10**9, boot="b"))[1] == ("restart", 1.0)
    assert joins(block(9), block(0, 0, boot="b"))[1] == ("restart", 0.0)
    assert joins(block(9), block(9, boot="b"))[1] == ("restart", 0.0)


def test_what_was_left_over_from_before_a_restart_is_dropped() -> None:
    """A broker may deliver or repeat the end of the old run when the new one has begun: it is not used again."""
    found = joins(
        block(0), block(1), block(0, 5 * BLOCK_NS, boot="b"), block(1), block(2), block(1, 6 * BLOCK_NS, boot="b")
    )
    assert [join for join, _ in found] == ["first", "continues", "restart", "duplicate", "late", "continues"]


def test_a_boot_id_that_comes_back_later_is_a_restart() -> None:
    """A sender whose boot ids repeat is not dropped for ever: samples from behind the last ones are new."""
    found = joins(block(7), block(0, 10 * BLOCK_NS, boot="b"), block(8, 20 * BLOCK_NS))
    assert [join for join, _ in found] == ["first", "restart", "restart"]


def test_another_rate_or_number_of_channels_is_a_restart() -> None:
    """Filters belong to a rate and channels: they start anew."""
    assert joins(block(0), block(1, channels=2))[1] == ("restart", 0.0)
    assert joins(block(0), slow(1, BLOCK_NS + 10**9))[1] == ("restart", 1.0)


def test_a_piece_never_continues() -> None:
    """Each piece stands alone, with nothing missing however long its sensor slept; repetitions are still found."""
    found = joins(block(0, piece=True), block(1, piece=True), block(5, piece=True), block(5, piece=True))
    assert found == [("piece", 0.0), ("piece", 0.0), ("piece", 0.0), ("duplicate", 0.0)]
    found = joins(block(5, piece=True), block(4, piece=True), block(0, piece=True, boot="b"))
    assert [join for join, _ in found] == ["piece", "late", "piece"]


def test_a_stream_behind_a_piece_starts_anew() -> None:
    """Between pieces nothing is missing, and nothing is joined."""
    assert joins(block(0, piece=True), block(1, 10**12))[1] == ("restart", 0.0)


def test_the_counters_say_what_came_and_what_did_not() -> None:
    """Samples are counted in each channel; dropped blocks add nothing to them."""
    continuity = Continuity()
    for one in (block(0), block(4), block(4), block(1), block(5), block(0, 7 * BLOCK_NS, boot="b")):
        continuity.feed(one)
    assert continuity.acquired_samples == 4 * LENGTH
    assert continuity.missing_samples == 4 * LENGTH
    assert continuity.lost_blocks == 3
    assert continuity.duplicate_blocks == 1
    assert continuity.late_blocks == 1
    assert continuity.gaps == 1
    assert continuity.restarts == 1


def test_lost_pieces_are_counted_in_blocks() -> None:
    """A piece that was lost is no missing signal, but it is no secret either."""
    continuity = Continuity()
    for seq in (0, 3):
        continuity.feed(block(seq, piece=True))
    assert continuity.lost_blocks == 2
    assert continuity.missing_samples == 0


@given(st.lists(st.integers(0, 40), max_size=60))
def test_no_block_is_used_twice_and_every_one_is_accounted_for(numbers: list[int]) -> None:
    """Whatever the order of arrival: used numbers only rise, and used + dropped blocks = blocks that came."""
    continuity = Continuity()
    found: list[Continuation] = [continuity.feed(block(seq)) for seq in numbers]
    dropped = (Join.DUPLICATE, Join.LATE)
    used = [seq for seq, one in zip(numbers, found, strict=True) if one.join not in dropped]
    assert used == sorted(set(used))
    assert len(used) + continuity.duplicate_blocks + continuity.late_blocks == len(numbers)
    assert continuity.acquired_samples == len(used) * LENGTH
    if used:
        expected = (used[-1] - used[0] + 1) * LENGTH
        assert continuity.acquired_samples + continuity.missing_samples == expected
