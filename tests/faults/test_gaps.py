"""Blocks that do not come, come twice, too late, or broken: each is counted, and none is measured twice."""

import time
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import replace
from pathlib import Path

import cbor2
import numpy as np
import pytest

from faults.harness import WITHIN_S, Node, node
from faults.judging import joined
from faults.rows import Figure, report
from faults.sending import BLOCK_S, RATE_HZ, Feed, site
from humbell.model import Block, Cause, Coverage, LifeCycle, PointId, Reading, SampleUnit
from humbell.wire import encode
from system.brokers import mosquitto, wait_for
from system.feeding import Sender

POINT = PointId("p-0", "de-h")
TOPIC = "humbell/blocks/works"
LOW, HIGH = 1.0, 6.0  # mm/s RMS; the limit is 4.5, with 4 s of delay both ways
GAPS = (1, 2, 4, 7, 40, 120)  # blocks of 0.25 s: up to 30 s
SAMPLE_S = 1 / RATE_HZ
STORED_S = 2e-6  # times and spans are kept by the microsecond


@contextmanager
def listening(folder: Path, retained: Block | None = None) -> Iterator[tuple[Node, Sender, Feed]]:
    """Yield a node of one point that has subscribed, and who feeds it; the broker has kept a block for it."""
    with (
        mosquitto(folder / "broker") as broker,
        Sender(broker.port) as sender,
        node(folder / "node", site(broker.port, 1), commit_s=60) as running,
    ):
        if retained is not None:
            sender.send(retained, retain=True)
            sender.flush()
        running.start()
        wait_for(lambda: f"1 {TOPIC}" in broker.log, WITHIN_S, "the service has subscribed")
        yield running, sender, Feed(sender, 1, (time.time_ns() // 10**9 - 600) * 10**9, 1.0)


def ended(running: Node, blocks: int) -> list[Reading]:
    """Wait until so many blocks have been measured, stop, and return what became of them."""
    wait_for(lambda: running.status["measured_blocks"] >= blocks, WITHIN_S, "all were measured")
    assert running.status["measured_blocks"] == blocks
    assert running.stop() == 0
    return running.readings()[POINT]


def since(some: list[Reading], feed: Feed) -> list[tuple[float, float, Cause | None]]:
    """Return end, span and cause of each reading, in seconds after the first sample."""
    return [((one.time_ns - feed.start_ns) / 1e9, one.span_s, one.cause) for one in some]


@pytest.mark.slow
def test_each_gap_is_found_and_counted_to_the_sample(tmp_path: Path, figure: Figure) -> None:
    """From one block to 30 s: what is missing is told, what follows settles anew, and nothing is bridged."""
    with listening(tmp_path) as (running, _, feed):
        feed.send(5)
        begins = []
        for blocks in GAPS:
            begins.append(feed.seconds)
            feed.lose(blocks)
            feed.send(5)
        feed.flush()
        sent = feed.seq - sum(GAPS)
        wait_for(lambda: running.status["measured_blocks"] == sent, WITHIN_S, "all were measured")
        assert running.source("works")["dropped_blocks"] == {"lost_before_us": sum(GAPS)}
        some = ended(running, sent)
    found = since(some, feed)
    worst_s = 0.0
    for begin_s, blocks in zip(begins, GAPS, strict=True):
        end_s = begin_s + blocks * BLOCK_S
        # Five seconds are whole frames, so that nothing but what was lost is in the reading of the gap.
        (told,) = (one for one in found if one[2] is Cause.NO_SAMPLES and abs(one[0] - end_s) < BLOCK_S / 2)
        worst_s = max(worst_s, abs(told[0] - end_s), abs(told[1] - blocks * BLOCK_S))
        (flagged,) = (one for one in found if abs(one[0] - (end_s + 1)) < SAMPLE_S)
        assert flagged[2] is Cause.SETTLING
    assert len([one for one in found if one[2] is Cause.NO_SAMPLES and one[0] > SAMPLE_S]) == len(GAPS)
    assert worst_s <= SAMPLE_S
    # Before the first block there were no samples either.
    assert joined(some, STORED_S)
    by = running.coverage()[POINT]
    assert by[Coverage.MEASURED] == pytest.approx(4 * (len(GAPS) + 1), abs=SAMPLE_S)
    assert by[Coverage.SETTLING] == pytest.approx(len(GAPS) + 1, abs=SAMPLE_S)
    report(
        figure,
        14,
        f"{len(GAPS)} gaps of {BLOCK_S:g} to {max(GAPS) * BLOCK_S:g} s",
        "100 % from 1 period",
        f"{len(GAPS)} found, worst error {1000 * worst_s:.3f} ms (1 period: {1000 * SAMPLE_S:.3f} ms)",
    )


@pytest.mark.slow
def test_a_gap_starts_the_delay_of_an_alarm_anew(tmp_path: Path) -> None:
    """Six times three seconds above the limit, a gap after each, are no alarm; four in a row are one."""
    with listening(tmp_path) as (running, _, feed):
        feed.levels[0] = HIGH
        for _ in range(6):
            feed.send(4)
            feed.lose(8)
        broken_ns = feed.end_ns
        feed.send(8)
        feed.flush()
        ended(running, feed.seq - 48)
        raised = [
            stored.transition
            for stored in running.kept().transitions.values()
            if stored.transition.after is LifeCycle.UNACKNOWLEDGED is not stored.transition.before
        ]
    # One second settles, four run the delay down.
    assert [one.time_ns for one in raised] == [pytest.approx(broken_ns + 5 * 10**9, abs=SAMPLE_S * 1e9)]


def broken(good: Block) -> dict[str, bytes]:
    """Return payloads that are no block, by the reason for which they are to be refused."""
    payload = encode(good)
    fields = cbor2.loads(payload)
    return {
        "cut off": payload[: len(payload) // 2],
        "empty": b"",
        "text": b"humbell",
        "no seq": cbor2.dumps({key: value for key, value in fields.items() if key != "seq"}),
        "later version": cbor2.dumps(fields | {"v": 2}),
        "no unit": cbor2.dumps(fields | {"unit": "furlong"}),
        "rate": cbor2.dumps(fields | {"fs": -1.0}),
        "more behind": payload + b"\x00",
    }


@pytest.mark.slow
def test_blocks_that_may_not_count_are_refused_and_counted(tmp_path: Path, figure: Figure) -> None:
    """Retained, repeated, out of order or malformed: the signal is measured as if they had never come."""
    kept = np.full((1, 128), 9.0)
    retained = Block("works", "boot-0", 7, 10**18, RATE_HZ, SampleUnit.METRES_PER_SECOND_SQUARED, kept)
    with listening(tmp_path, retained) as (running, sender, feed):
        good = [feed.make() for _ in range(80)]
        wrong = broken(replace(good[0], seq=1000))
        sender.send(*good[:40])
        # The same again, at once and from far back; then each kind of broken ones; then one behind its successors.
        sender.send(good[39], good[39], *good[3:9])
        for payload in wrong.values():
            sender.send_bytes(TOPIC, payload)
        sender.send(*good[40:60], *good[61:63], good[60], *good[63:])
        sender.flush()
        wait_for(lambda: running.status["measured_blocks"] == 79, WITHIN_S, "all were measured")
        source = running.source("works")
        status = running.command("status")
        assert running.stop() == 0
        some = running.readings()[POINT]
    counters = source["details"]
    refused = dict(counters["dropped"])
    assert (refused.pop("retained"), refused.pop("duplicate")) == (1, 8)
    assert sum(refused.values()) == len(wrong)
    assert counters["received"] == 80 + 1 + 8 + len(wrong)
    # What was late is a gap in its place.
    assert source["dropped_blocks"] == {"late": 1, "lost_before_us": 1}
    reasons = counters["dropped"] | source["dropped_blocks"]
    line = ", ".join(f"{reason} {count}" for reason, count in sorted(reasons.items()))
    assert f"  dropped: {line}\n" in status.out
    assert joined(some, STORED_S)
    assert some[-1].time_ns == feed.end_ns
    assert [one.value for one in some if one.cause is None] == pytest.approx([LOW] * 17, rel=0.05)
    report(
        figure,
        28,
        "retained, repeated, out of order and malformed blocks",
        "refused and counted, 0 evaluated twice",
        f"{counters['received'] - 79} of {counters['received']} refused and counted, 0 evaluated twice",
    )
