"""The one way in for commands: check, write down, then act."""

import sqlite3
from collections.abc import Callable
from dataclasses import dataclass

from humbell.alarms import Event, follow
from humbell.app.board import Board
from humbell.journal import Deed
from humbell.model import Action, AlarmId, AlarmType, Command, Measure, Transition

# A person waits for the answer; a disk that hangs for longer is told as such.
_WAIT_S = 5.0

_EVENTS = {Action.ACKNOWLEDGE: Event.ACKNOWLEDGE}


@dataclass(frozen=True, slots=True)
class Answer:
    """
    What became of a command.

    Args:
        done: whether it was done.

        text: what happened, or why not and what to do.

        seq: its number in the journal; None where it did not get there.
    """

    done: bool
    text: str
    seq: int | None = None


class Submit:
    """
    Takes commands from wherever they come.

    Args:
        board: what is true now.

        note: commits a deed, in so many seconds.

        act: does what is asked for, in so many seconds.
    """

    def __init__(
        self,
        board: Board,
        note: Callable[[Deed, float], int],
        act: Callable[[AlarmId, Event, float], Transition | None],
    ) -> None:
        self._board = board
        self._note = note
        self._act = act

    def __call__(self, command: Command) -> Answer:
        """Check *command*, write it to the journal, do it, and tell what came of it."""
        alarm = _alarm(command)
        state = None if alarm is None else self._board.states.get(alarm)
        if alarm is None or state is None:
            return Answer(done=False, text=f"{command.target}: there is no such alarm (see humbell alarms)")
        event = _EVENTS[command.action]
        if follow(state.life_cycle, event) is state.life_cycle:
            return Answer(done=False, text=f"{command.target}: nothing to {command.action}, it is {state.life_cycle}")
        deed = Deed(command.who, command.origin, command.action, command.target, command.note, "accepted")
        try:
            seq = self._note(deed, _WAIT_S)
        except (TimeoutError, sqlite3.Error) as error:
            why = str(error) or "it does not answer"
            return Answer(done=False, text=f"{command.target}: not done, the journal cannot take it: {why} (try again)")
        try:
            transition = self._act(alarm, event, _WAIT_S)
        except TimeoutError:
            return Answer(done=False, text=f"{command.target}: not done in time (see humbell status)", seq=seq)
        after = state.life_cycle if transition is None else transition.after
        return Answer(done=transition is not None, text=f"{command.target}: {after}", seq=seq)


def _alarm(command: Command) -> AlarmId | None:
    measure, dot, kind = command.alarm.rpartition(".")
    try:
        return AlarmId(command.machine, command.point, Measure(measure), AlarmType(kind)) if dot else None
    except ValueError:
        return None
