"""Tasks: one turn after the other in a thread with a name; a turn that fails is told, counted, and tried again."""

import threading
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager

import pytest
from structlog.testing import capture_logs

from humbell.app import task as module
from humbell.app.task import Task

PATIENCE_S = 5.0


@contextmanager
def running(turn: Callable[[], bool]) -> Iterator[Task]:
    """Yield a task that runs; afterwards it is stopped."""
    task = Task("test", turn)
    task.start()
    try:
        yield task
    finally:
        task.stop()
        assert task.join(PATIENCE_S)


def test_turns_follow_each_other_until_it_is_stopped() -> None:
    """In a thread of the task's name, which status and debuggers show."""
    third = threading.Event()
    names: list[str] = []

    def turn() -> bool:
        names.append(threading.current_thread().name)
        if len(names) == 3:
            third.set()
        return True

    with running(turn) as task:
        assert third.wait(PATIENCE_S)
        assert task.alive
        assert not task.stopping
        assert task.age_s < PATIENCE_S
    assert set(names) == {"test"}
    assert (task.alive, task.stopping, task.errors, task.last_error) == (False, True, 0, "")


def test_a_task_with_nothing_left_to_do_ends_by_itself() -> None:
    """The end of a source is no error."""
    turns: list[int] = []

    def turn() -> bool:
        turns.append(1)
        return False

    with running(turn) as task:
        assert task.join(PATIENCE_S)
    assert (turns, task.errors, task.alive) == ([1], 0, False)


def test_a_turn_that_fails_is_told_and_counted_and_the_next_one_is_tried(monkeypatch: pytest.MonkeyPatch) -> None:
    """One mistake must not end the watch."""
    monkeypatch.setattr(module, "_PAUSE_S", 0.01)
    good = threading.Event()
    turns: list[int] = []

    def turn() -> bool:
        turns.append(1)
        if len(turns) <= 2:
            raise ZeroDivisionError(f"turn {len(turns)}")
        good.set()
        return True

    with capture_logs() as logs, running(turn) as task:
        assert good.wait(PATIENCE_S)
    assert (task.errors, task.last_error) == (2, "ZeroDivisionError: turn 2")
    assert [(one["event"], one["task"], one["count"], one["log_level"], one["exc_info"]) for one in logs] == [
        ("task_failed", "test", 1, "error", True),
        ("task_failed", "test", 2, "error", True),
    ]


def test_a_stop_ends_the_pause_after_a_failure() -> None:
    """However long it is."""
    failed = threading.Event()

    def turn() -> bool:
        failed.set()
        raise ZeroDivisionError

    with capture_logs(), running(turn) as task:
        assert failed.wait(PATIENCE_S)
        task.stop()
        assert task.join(PATIENCE_S)


def test_a_wait_in_a_turn_ends_when_the_task_is_stopped() -> None:
    """A source that waits for its next try holds up nobody."""
    waits = threading.Event()
    told: list[bool] = []

    def turn() -> bool:
        waits.set()
        told.append(tasks[0].wait(60.0))
        return False

    tasks = [Task("test", turn)]
    tasks[0].start()
    assert waits.wait(PATIENCE_S)
    tasks[0].stop()
    assert tasks[0].join(PATIENCE_S)
    assert told == [True]


def test_a_turn_that_hangs_is_seen_by_its_age(monkeypatch: pytest.MonkeyPatch) -> None:
    """It begins no new turn, so its beat gets old; joining it does not wait for ever."""
    now_ns = [0]
    monkeypatch.setattr(time, "monotonic_ns", lambda: now_ns[0])
    go, in_turn = threading.Event(), threading.Event()

    def turn() -> bool:
        in_turn.set()
        return not go.wait(PATIENCE_S)

    with running(turn) as task:
        assert in_turn.wait(PATIENCE_S)
        now_ns[0] = 30 * 10**9
        assert task.age_s == 30
        assert not task.join(0.01)
        go.set()
