"""What `humbell status` tells, and the service does, while a part of it is away."""

import os
import pty
import select
import signal
import sqlite3
import subprocess
import time
from collections.abc import Iterator
from contextlib import closing, contextmanager
from pathlib import Path

import pytest

from faults.disks import fill, in_memory
from faults.harness import HUMBELL, STOP_S, WITHIN_S, Node, environment, node
from faults.judging import joined
from faults.sending import Feed, site
from system.brokers import free_port, mosquitto, wait_for
from system.drivers import bad_drivers
from system.feeding import Sender

STORED_S = 2e-6  # times and spans are kept by the microsecond
ALARM = "p-101/de-h/velocity_rms.high"
PLUGIN = """\
site: tarnholm-water
node: pumphouse-1
sources:
  works: {kind: tarnholm, rate_hz: 2560}
machines:
  p-101: {points: {de-h: {channel: works/0, velocity: {high: 4.5}, acceleration: off}}}
"""
RAISED_SOON = PLUGIN.replace("high: 4.5", "high: 0.5, on_delay_s: 8")


def says(running: Node, text: str) -> bool:
    """Return whether `humbell status` tells of *text* as trouble, and ends with 1."""
    done = running.command("status")
    trouble = done.out.partition("\nTrouble:\n")[2].partition("\n\n")[0]
    return done.code == 1 and text in trouble


@contextmanager
def taken(journal: Path) -> Iterator[None]:
    """Keep the journal from being written, as a disk does that is away."""
    with closing(sqlite3.connect(journal, isolation_level=None, timeout=WITHIN_S)) as connection:
        connection.execute("BEGIN EXCLUSIVE")
        yield
        connection.execute("ROLLBACK")


@pytest.mark.slow
def test_status_tells_of_a_broker_and_a_sender_that_are_away(tmp_path: Path) -> None:
    """First the sender's silence with its age, then the broker; back again, all is well, without a restart."""
    with mosquitto(tmp_path / "broker") as broker, node(tmp_path / "node", site(broker.port, 1)) as running:
        running.start()
        wait_for(lambda: "1 humbell/blocks/works" in broker.log, WITHIN_S, "the service has subscribed")
        with Sender(broker.port) as sender:
            feed = Feed(sender, 1, time.time_ns() - 3600 * 10**9, 1.0)
            feed.send(3)
            feed.flush()
            wait_for(lambda: running.status["measured_blocks"] == 12, WITHIN_S, "all were measured")
            done = running.command("status")
            assert (done.code, done.err) == (0, "")
            assert "source works: open, 12 blocks, last " in done.out
            assert "\n  velocity_rms: 1.00" in done.out
            wait_for(lambda: (running.source("works")["age_s"] or 0.0) > 5.5, WITHIN_S, "the sender is silent")
            assert says(running, "- source works: no blocks, the last ")
            assert says(running, " s ago (look at the sender and its link)")
        broker.stop()
        wait_for(lambda: bool(running.source("works")["trouble"]), WITHIN_S, "the lost broker is seen")
        assert says(running, "- source works: ")
        assert says(running, f"127.0.0.1:{broker.port}")
        broker.start()
        wait_for(lambda: not running.source("works")["trouble"], WITHIN_S, "the broker is found again")
        with Sender(broker.port) as sender:
            wait_for(lambda: broker.log.count("1 humbell/blocks/works") >= 2, WITHIN_S, "subscribed again")
            again = Feed(sender, 1, feed.end_ns, 1.0)
            again.lose(12)
            again.start_ns = feed.start_ns
            again.send(1)
            again.flush()
            wait_for(lambda: running.source("works")["blocks"] == 16, WITHIN_S, "blocks come again")
        assert running.command("status").code == 0
        assert running.stop() == 0


@pytest.mark.slow
def test_a_full_disk_is_told_and_alarms_are_raised_and_acknowledged(tmp_path: Path) -> None:
    """Old values make room for what is new; with room again, all is well without a restart."""
    with (
        in_memory(tmp_path / "disk", "6m") as disk,
        node(tmp_path / "node", RAISED_SOON, commit_s=1, journal=disk) as running,
    ):
        running.start()
        wait_for(lambda: running.status["journal"]["last_commit_age_s"] is not None, WITHIN_S, "a first commit")

        def told() -> bool:
            fill(disk)
            return bool(running.status["journal"]["trouble"])

        wait_for(told, WITHIN_S, "the lack of room is told")
        fill(disk)
        assert says(running, f"- journal: {running.journal}: the disk is full: ")
        wait_for(lambda: running.alarms[ALARM][0] == "unacknowledged", WITHIN_S, "it is raised")
        assert running.command("alarms", "acknowledge", ALARM).code == 0
        fill(disk).unlink()
        wait_for(lambda: not running.status["journal"]["trouble"], WITHIN_S, "there is room again")
        assert running.stop() == 0


@pytest.mark.slow
def test_a_journal_that_is_away_stops_no_measuring_and_is_told(tmp_path: Path) -> None:
    """Commands are refused, alarms are raised; when it is back, all that waited is written, in order."""
    with node(tmp_path / "node", RAISED_SOON, commit_s=1) as running:
        running.start()
        wait_for(lambda: running.status["journal"]["last_commit_age_s"] is not None, WITHIN_S, "a first commit")
        with taken(running.journal):
            wait_for(lambda: running.status["journal"]["failures"] >= 1, WITHIN_S, "commits fail")
            assert says(running, f"- journal: {running.journal}: the journal cannot be written: ")
            assert len(running.told("journal_away")) == 1
            before = running.source("works")["blocks"]
            wait_for(lambda: running.source("works")["blocks"] > before + 4, WITHIN_S, "measuring goes on")
            wait_for(lambda: running.alarms[ALARM][0] == "unacknowledged", WITHIN_S, "it is raised")
            refused = running.command("alarms", "acknowledge", ALARM)
            assert refused.code == 1
            assert "not done, the journal cannot take it" in refused.out
            assert running.alarms[ALARM][0] == "unacknowledged"
        wait_for(lambda: running.told("journal_recovered"), WITHIN_S, "it is written again, which is told")
        assert running.status["journal"]["trouble"] == ""
        done = running.command("alarms", "acknowledge", ALARM)
        assert (done.code, done.out) == (0, "p-101/de-h velocity_rms.high: acknowledged\n")
        assert running.stop() == 0
        (some,) = running.readings().values()
        assert joined(some, STORED_S)
        afters = [stored.transition.after for stored in running.kept().transitions.values()]
        assert afters == ["normal", "unacknowledged", "acknowledged"]


@pytest.mark.slow
def test_a_stop_without_a_journal_is_bounded_and_says_that_it_was_not_clean(tmp_path: Path) -> None:
    """What could not be written is lost, within the time of a stop, and the exit code is that of a part away."""
    with node(tmp_path / "node", PLUGIN, commit_s=1) as running:
        running.start()
        wait_for(lambda: running.status["journal"]["last_commit_age_s"] is not None, WITHIN_S, "a first commit")
        with taken(running.journal):
            wait_for(lambda: running.status["journal"]["trouble"], WITHIN_S, "commits fail")
            asked_s = time.monotonic()
            assert running.stop() == 3
            assert time.monotonic() - asked_s < STOP_S
            assert not [one for one in running.told("stopped") if one["clean"]]


@pytest.mark.slow
def test_without_a_service_status_reads_what_it_left(tmp_path: Path) -> None:
    """Exit code 3, and what the journal knows; acknowledging is refused, the rest can be read."""
    with node(tmp_path, PLUGIN) as running:
        nothing = running.command("status")
        assert nothing.code == 3
        assert "there is no journal" in nothing.err
        running.start()
        wait_for(lambda: running.source("works")["blocks"] > 8, WITHIN_S, "some signal came")
        running.kill()
        left = running.command("status")
        assert left.code == 3
        assert "no service runs here (start it: humbell run CONFIG)" in left.err
        assert "running: False\n" in left.out
        refused = running.command("alarms", "acknowledge", "p-101/de-h/velocity_rms.high")
        assert (refused.code, refused.out) == (3, "")
        assert running.command("alarms", "list").code == 0
        assert running.command("coverage").code == 0


@pytest.mark.slow
def test_a_second_service_on_one_journal_is_refused(tmp_path: Path) -> None:
    """Exit code 2 and one line; the first goes on, and its journal does not know of the other."""
    with node(tmp_path, PLUGIN) as running:
        running.start()
        second = running.command("run")
        assert (second.code, second.out) == (2, "")
        (line,) = second.err.splitlines()
        assert line == (
            f"{running.journal.with_name('control.sock')}: there can be no socket: another humbell runs with this "
            "journal (stop the other one, or check the folder's rights)"
        )
        before = running.source("works")["blocks"]
        wait_for(lambda: running.source("works")["blocks"] > before, WITHIN_S, "the first goes on")
        assert running.stop() == 0


FAIL = ("making", "opening", "reading", "wifi")


@pytest.mark.slow
def test_a_source_that_fails_leaves_the_others_running(tmp_path: Path) -> None:
    """Drivers that fail when made, opened, read or loaded, and a broker that is not there: one is measured."""
    text = PLUGIN.replace(
        "machines:",
        "  making: {kind: bad, fails: create}\n"
        "  opening: {kind: bad, fails: open}\n"
        "  reading: {kind: bad, fails: read}\n"
        "  wifi: {kind: mqtt, broker: away}\n"
        f"brokers:\n  away: {{host: 127.0.0.1, port: {free_port()}}}\nmachines:",
    )
    with node(tmp_path / "node", text, environ=bad_drivers(tmp_path / "drivers")) as running:
        running.start()
        wait_for(lambda: all(running.source(n)["trouble"] for n in FAIL), WITHIN_S, "trouble")
        done = running.command("status")
        assert done.code == 1
        for said in (
            "making: sources.making: KeyError: 'serial number'",
            "opening: sources.opening: OSError: no such device",
            "reading: sources.reading: ZeroDivisionError: a mistake in the driver",
            "wifi: ",
        ):
            assert f"\n- source {said}" in done.out
        wait_for(lambda: running.source("reading")["opened"] >= 2, WITHIN_S, "a new start is tried")
        assert len(running.told("source_away")) <= 4
        assert all(one["errors"] == 0 for one in running.status["tasks"])
        works = running.source("works")
        assert (works["state"], works["trouble"]) == ("open", "")
        assert works["seconds"] > 0
        assert running.stop() == 0


@pytest.mark.slow
def test_the_log_is_readable_on_a_terminal(tmp_path: Path) -> None:
    """Events and their fields in words, no JSON; in a pipe, as everywhere in these tests, it is JSON."""
    made = Node(tmp_path, PLUGIN)
    ours, theirs = pty.openpty()
    process = subprocess.Popen(
        [*HUMBELL, "run", str(made.config)], stderr=theirs, stdout=subprocess.DEVNULL, env=environment()
    )
    os.close(theirs)
    text, asked, give_up_s = "", False, time.monotonic() + WITHIN_S
    try:
        while "stopped" not in text and time.monotonic() < give_up_s:
            if select.select([ours], [], [], 0.1)[0]:
                text += os.read(ours, 4096).decode()
            if "started" in text and not asked:
                process.send_signal(signal.SIGTERM)
                asked = True
        assert process.wait(STOP_S) == 0
    finally:
        process.kill()
        process.wait(STOP_S)
        os.close(ours)
    assert "started" in text
    assert "pumphouse-1" in text
    assert '{"' not in text
