"""Kills at any moment, again and again: what was committed stays, what was not shows, and nothing is told twice."""

import math
import random
import time
from dataclasses import dataclass, field
from itertools import pairwise
from pathlib import Path

import pytest

from faults.harness import WITHIN_S, Kept, Node, node
from faults.judging import joined
from faults.rows import Figure, report
from faults.sending import BLOCK_S, Feed, site
from humbell.model import Coverage, LifeCycle, PointId
from system.brokers import mosquitto, wait_for
from system.feeding import Sender

PACE = 8.0
COMMIT_S = 4.0  # of signal: at that pace a commit every half second, so that kills fall into some
LONGEST_S = 1.5  # between a start and the kill
SHARE_MEASURED = 0.3  # at least: what the broker had for us when we came back was used
LOW, HIGH = 1.0, 6.0  # mm/s RMS; the limit is 4.5, with 4 s of delay both ways
# Seconds of signal at which the level changes, and comes again: alarms are raised and return all the time.
STORIES = ((7.0, 13.0), (9.0, 30.0))
POINTS = 3


@dataclass
class Seen:
    """
    What a reader has seen so far.

    Args:
        last: all that was committed when he last looked.

        lost: things that had been committed and were gone later.

        looks: how often he looked.
    """

    last: Kept = field(default_factory=Kept)
    lost: int = 0
    looks: int = 0

    def look(self, running: Node) -> None:
        """Compare what is committed now with what was seen before."""
        now = running.kept()
        for before, after in (
            (self.last.entries, now.entries),
            (self.last.transitions, now.transitions),
            (self.last.chunks, now.chunks),
        ):
            self.lost += len(before.items() - after.items())
        # Numbers grow with the clock: none is given out a second time, or behind a higher one.
        stamps = [now.entries[seq].moment.mono_ns for seq in sorted(now.entries)]
        assert stamps == sorted(stamps)
        self.last = now
        self.looks += 1


def play(feed: Feed) -> None:
    """Send what is due, with the levels that the stories have now."""
    for point, (low_s, high_s) in enumerate(STORIES):
        feed.levels[point] = LOW if feed.seconds % (low_s + high_s) < low_s else HIGH
    feed.pump()


def assert_lives_are_whole(kept: Kept) -> int:
    """Check that each transition goes on from the one before it, and return how many alarms were raised."""
    lives: dict[object, list[tuple[LifeCycle, LifeCycle, bool, str | None]]] = {}
    for seq in sorted(kept.transitions):
        one = kept.transitions[seq].transition
        lives.setdefault(one.alarm, []).append((one.before, one.after, one.verified, one.occurrence))
    for life in lives.values():
        assert life[0][0] is LifeCycle.NORMAL
        for (_, was, was_verified, occurrence), (before, after, verified, later) in pairwise(life):
            assert before is was
            assert (after, verified) != (was, was_verified)
            if LifeCycle.NORMAL is not before is after:
                assert later == occurrence
    raised = [
        occurrence
        for life in lives.values()
        for before, after, _, occurrence in life
        if after is LifeCycle.UNACKNOWLEDGED is not before
    ]
    assert len(set(raised)) == len(raised)
    return len(raised)


def assert_each_second_counts_once(running: Node, feed: Feed, restarts: int) -> tuple[float, float]:
    """Check that what each second was adds up to all of them; return the shares that were measured and lost."""
    shares = []
    for number in range(POINTS):
        point = PointId(f"p-{number}", "de-h")
        by = running.coverage()[point]
        some = running.readings()[point]
        before_s = some[0].span_s if some[0].cause == "no_samples" else 0.0
        assert math.fsum(by.values()) - before_s == pytest.approx(feed.seconds, abs=2 * BLOCK_S * (restarts + 1))
        # Each reading begins where the one before it ends: to a sample where we ran, to a block where we were killed.
        assert joined(some, BLOCK_S)
        assert set(by) <= {Coverage.MEASURED, Coverage.SETTLING, Coverage.DAEMON_DOWN, Coverage.NO_SAMPLES}
        shares.append((by[Coverage.MEASURED] / feed.seconds, by.get(Coverage.DAEMON_DOWN, 0.0) / feed.seconds))
    assert len(set(shares)) == 1
    return shares[0]


def kill_again_and_again(folder: Path, kills: int, figure: Figure) -> None:
    """Kill the service at random moments while blocks come, and look each time at what is left."""
    random_ = random.Random(kills)  # noqa: S311 - moments, not secrets
    seen = Seen()
    standing = 0
    with (
        mosquitto(folder / "broker", "allow_anonymous true", "max_queued_messages 0") as broker,
        Sender(broker.port) as sender,
        node(folder / "node", site(broker.port, POINTS), commit_s=COMMIT_S) as running,
    ):
        running.start()
        wait_for(lambda: "1 humbell/blocks/works" in broker.log, WITHIN_S, "the service has subscribed")
        feed = Feed(sender, POINTS, time.time_ns() - 24 * 3600 * 10**9, PACE)
        for _ in range(kills):
            kill_s = time.monotonic() + random_.uniform(0.0, LONGEST_S)
            while time.monotonic() < kill_s:
                play(feed)
                seen.look(running)
            running.kill()
            seen.look(running)
            before = running.life()
            standing += sum(state is not LifeCycle.NORMAL for state in before.values())
            running.start(lambda: play(feed))
            assert running.kept().chunks.keys() >= seen.last.chunks.keys()
            seen.look(running)
            feed.flush()
        wait_for(lambda: running.source("works")["age_s"] is not None, WITHIN_S, "it has caught up")
        feed.flush()
        measured = -1
        while measured != (measured := running.status["measured_blocks"]):
            time.sleep(0.3)
        assert running.stop() == 0
        seen.look(running)
        assert seen.lost == 0
        raised = assert_lives_are_whole(seen.last)
        measured_share, down_share = assert_each_second_counts_once(running, feed, kills)
    assert raised > kills / 10
    assert measured_share > SHARE_MEASURED
    report(
        figure,
        20,
        f"kill -9 x {kills} of the service",
        "0 committed lost, 0 told twice",
        f"0 lost in {seen.looks} looks, {len(seen.last.transitions)} transitions, {raised} raised, "
        f"{standing} standing at a kill, {100 * measured_share:.0f} % measured, {100 * down_share:.0f} % down",
    )


@pytest.mark.slow
def test_ten_kills_lose_nothing_that_was_committed(tmp_path: Path, figure: Figure) -> None:
    """Sequence numbers go on, alarms go on, and the seconds lost are in the coverage."""
    kill_again_and_again(tmp_path, 10, figure)


@pytest.mark.long
def test_a_hundred_kills_lose_nothing_that_was_committed(tmp_path: Path, figure: Figure) -> None:
    """The same, long enough for rare moments."""
    kill_again_and_again(tmp_path, 100, figure)
