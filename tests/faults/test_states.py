"""A kill in each state that an alarm can be in."""

import time
from collections.abc import Callable
from pathlib import Path

import pytest

from faults.harness import WITHIN_S, Node, node
from faults.rows import Figure, report
from faults.sending import Feed, site
from system.brokers import mosquitto, wait_for
from system.feeding import Sender

ALARM = "p-{}/de-h/velocity_rms.high"
STATES = ("normal", "unacknowledged", "acknowledged", "returned_unacknowledged")
PACE = 8.0
LOW, HIGH = 1.0, 6.0  # mm/s RMS; the limit is 4.5
KILLS = 3
AGAIN_BLOCKS = 40  # 10 s of signal: longer than any delay


def acknowledge(running: Node, point: int) -> None:
    """Acknowledge the alarm of one machine."""
    answer = running.ask(
        ask="command",
        action="acknowledge",
        machine=f"p-{point}",
        point="de-h",
        alarm="velocity_rms.high",
        who="test",
        origin="test",
    )
    assert answer["done"], answer


@pytest.mark.slow
def test_every_state_of_an_alarm_outlives_a_kill(tmp_path: Path, figure: Figure) -> None:
    """Normal, unacknowledged, acknowledged and returned: each goes on as it was, and nothing is told again."""
    with (
        mosquitto(tmp_path / "broker") as broker,
        Sender(broker.port) as sender,
        node(tmp_path / "node", site(broker.port, len(STATES))) as running,
    ):
        running.start()
        wait_for(lambda: "1 humbell/blocks/works" in broker.log, WITHIN_S, "the service has subscribed")
        feed = Feed(sender, len(STATES), time.time_ns() - 3600 * 10**9, PACE)

        def until(condition: Callable[[], bool], what: str) -> None:
            def holds() -> bool:
                feed.pump()
                return condition()

            wait_for(holds, WITHIN_S, what)

        def states() -> list[str]:
            return [running.alarms[ALARM.format(point)][0] for point in range(len(STATES))]

        feed.levels = [LOW, HIGH, HIGH, HIGH]
        until(lambda: states() == ["normal", *["unacknowledged"] * 3], "three are raised")
        acknowledge(running, 2)
        feed.levels[3] = LOW
        until(lambda: states() == list(STATES), "the last has returned")
        repeated = 0
        for _ in range(KILLS):
            # What a status shows may be a moment ahead of the disk.
            until(lambda: sorted(running.life().values()) == sorted(STATES), "all is committed")
            before, kept = running.alarms, running.kept()
            running.kill()
            running.start(feed.pump)
            after = running.alarms
            assert {name: (one[0], one[2]) for name, one in after.items()} == {
                name: (one[0], one[2]) for name, one in before.items()
            }
            until(lambda: running.status["measured_blocks"] > AGAIN_BLOCKS, "it measures again")
            until(lambda: all(verified for _, verified, _ in running.alarms.values()), "all are judged again")
            assert states() == list(STATES)
            again = running.kept().transitions
            assert kept.transitions.items() <= again.items()
            new = [one.transition for seq, one in again.items() if seq not in kept.transitions]
            repeated += sum(one.before is not one.after for one in new)
        assert repeated == 0
        # They are alive, too: what a person does, and what the machine does, still counts.
        acknowledge(running, 3)
        acknowledge(running, 1)
        feed.levels[:] = [HIGH, LOW, LOW, LOW]
        until(lambda: states() == ["unacknowledged", *["normal"] * 3], "each goes its way")
        feed.flush()
        assert running.stop() == 0
    report(figure, 20, f"kill -9 in each of {len(STATES)} states", "same state", f"0 lost, {repeated} repeated")
