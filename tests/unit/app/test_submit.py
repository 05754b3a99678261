"""Commands: checked, written down, and only then done; what cannot be written down is not done."""

import sqlite3
from dataclasses import dataclass, field

import pytest

from humbell.alarms import AlarmState, Event
from humbell.app.board import Board
from humbell.app.submit import Answer, Submit
from humbell.journal import Deed
from humbell.model import Action, AlarmId, AlarmType, Command, LifeCycle, Measure, Transition

ALARM = AlarmId("p-101", "de-h", Measure.VELOCITY_RMS, AlarmType.HIGH)
COMMAND = Command(Action.ACKNOWLEDGE, "p-101", "de-h", "velocity_rms.high", "ines", "command line", "foot bolt")
TARGET = "p-101/de-h velocity_rms.high"


@dataclass
class Desk:
    """
    The parts around `Submit`, which note what they are asked for, in order.

    Args:
        state: of the alarm.

        note_fails: what the journal raises; None where it takes everything.

        act_fails: what the measures raise.

        acts: whether the deed changes anything.
    """

    state: LifeCycle
    note_fails: Exception | None = None
    act_fails: Exception | None = None
    acts: bool = True
    done: list[object] = field(default_factory=list)

    def note(self, deed: Deed, timeout_s: float) -> int:
        """Commit *deed*."""
        assert timeout_s > 0
        if self.note_fails is not None:
            raise self.note_fails
        self.done.append(deed)
        return 17

    def act(self, alarm: AlarmId, event: Event, timeout_s: float) -> Transition | None:
        """Do it."""
        assert timeout_s > 0
        if self.act_fails is not None:
            raise self.act_fails
        self.done.append((alarm, event))
        told = Transition(
            *(1, alarm, self.state, LifeCycle.ACKNOWLEDGED), verified=True, value=5.0, limit=4.5, occurrence="o"
        )
        return told if self.acts else None

    def __call__(self, command: Command) -> Answer:
        """Submit *command*."""
        board = Board()
        board.show((), {ALARM: AlarmState(life_cycle=self.state)})
        return Submit(board, self.note, self.act)(command)


def test_a_deed_is_written_down_before_it_is_done() -> None:
    """With who, where from, on what and why; the answer tells the new state, and the number in the journal."""
    desk = Desk(LifeCycle.UNACKNOWLEDGED)
    assert desk(COMMAND) == Answer(done=True, text=f"{TARGET}: acknowledged", seq=17)
    assert desk.done == [
        Deed("ines", "command line", "acknowledge", TARGET, "foot bolt", "accepted"),
        (ALARM, Event.ACKNOWLEDGE),
    ]


@pytest.mark.parametrize(
    ("machine", "alarm"),
    [
        ("p-102", "velocity_rms.high"),
        ("p-101", "velocity_rms.high_high"),
        ("p-101", "velocity_rms"),
        ("p-101", "loudness.high"),
        ("p-101", "velocity_rms.low"),
        ("p-101", ""),
        ("p-101", "."),
    ],
)
def test_an_alarm_that_is_not_there_is_told_and_nothing_is_written(machine: str, alarm: str) -> None:
    """Neither another machine's nor one of no such measure or type."""
    desk = Desk(LifeCycle.UNACKNOWLEDGED)
    command = Command(Action.ACKNOWLEDGE, machine, "de-h", alarm, "ines", "command line")
    answer = desk(command)
    assert answer == Answer(done=False, text=f"{command.target}: there is no such alarm (see humbell alarms)")
    assert desk.done == []


@pytest.mark.parametrize("state", [LifeCycle.NORMAL, LifeCycle.ACKNOWLEDGED, LifeCycle.LATCHED_ACKNOWLEDGED])
def test_where_there_is_nothing_to_do_nothing_is_written(state: LifeCycle) -> None:
    """The answer tells the state that it is in."""
    desk = Desk(state)
    assert desk(COMMAND) == Answer(done=False, text=f"{TARGET}: nothing to acknowledge, it is {state}")
    assert desk.done == []


@pytest.mark.parametrize(
    ("error", "why"),
    [(sqlite3.OperationalError("disk is full"), "disk is full"), (TimeoutError(), "it does not answer")],
)
def test_without_the_journal_nothing_is_done(error: Exception, why: str) -> None:
    """What nobody could prove later must not happen."""
    desk = Desk(LifeCycle.UNACKNOWLEDGED, note_fails=error)
    text = f"{TARGET}: not done, the journal cannot take it: {why} (try again)"
    assert desk(COMMAND) == Answer(done=False, text=text)
    assert desk.done == []


def test_what_is_not_done_in_time_is_told_as_not_done() -> None:
    """With its number, under which the attempt is in the journal."""
    desk = Desk(LifeCycle.UNACKNOWLEDGED, act_fails=TimeoutError())
    assert desk(COMMAND) == Answer(done=False, text=f"{TARGET}: not done in time (see humbell status)", seq=17)


def test_what_changed_meanwhile_is_told_as_not_done() -> None:
    """Two people acknowledge at once: for one of them there is nothing left to do."""
    desk = Desk(LifeCycle.UNACKNOWLEDGED, acts=False)
    answer = desk(COMMAND)
    assert (answer.done, answer.seq) == (False, 17)
