"""Bounded queues: what goes in comes out in order, what does not fit waits or is dropped, and all is counted."""

import threading
from collections import deque

from hypothesis import given
from hypothesis import strategies as st

from humbell.app.queues import BoundedQueue, QueueState

NOW_S = 0.0
PATIENCE_S = 5.0


def test_what_finds_no_room_is_refused_and_not_counted() -> None:
    """The caller keeps it, so nothing is lost: it neither passed nor was dropped."""
    queue: BoundedQueue[int] = BoundedQueue("blocks", 2)
    assert [queue.put(number, NOW_S) for number in range(3)] == [True, True, False]
    assert queue.state == QueueState("blocks", length=2, bound=2, highest=2, passed=2, dropped=0)


def test_what_is_pushed_finds_room_in_place_of_the_oldest() -> None:
    """Which is given back, so that what may not be lost can be saved from it, and counted."""
    queue: BoundedQueue[str] = BoundedQueue("journal", 2)
    assert [queue.push(letter) for letter in "abc"] == [None, None, "a"]
    assert queue.state == QueueState("journal", length=2, bound=2, highest=2, passed=3, dropped=1)
    assert [queue.get(NOW_S) for _ in range(3)] == ["b", "c", None]


def test_who_waits_for_room_gets_it_when_something_is_taken_out() -> None:
    """A source that has to wait goes on at once."""
    queue: BoundedQueue[int] = BoundedQueue("blocks", 1)
    queue.put(1, NOW_S)
    found: list[bool] = []
    waiting = threading.Thread(target=lambda: found.append(queue.put(2, PATIENCE_S)))
    waiting.start()
    assert queue.get(PATIENCE_S) == 1
    waiting.join(PATIENCE_S)
    assert found == [True]
    assert queue.get(NOW_S) == 2


def test_who_waits_for_an_item_gets_it_when_it_comes() -> None:
    """Nobody sleeps over an item."""
    queue: BoundedQueue[int] = BoundedQueue("blocks", 1)
    found: list[int | None] = []
    waiting = threading.Thread(target=lambda: found.append(queue.get(PATIENCE_S)))
    waiting.start()
    queue.put(7, NOW_S)
    waiting.join(PATIENCE_S)
    assert found == [7]


@given(st.integers(1, 4), st.lists(st.sampled_from(["put", "push", "get"]), max_size=40))
def test_it_counts_like_a_list_with_a_bound(bound: int, steps: list[str]) -> None:
    """Passed = taken out + dropped + still there, at every moment, in the order of arrival."""
    queue: BoundedQueue[int] = BoundedQueue("q", bound)
    model: deque[int] = deque()
    passed = dropped = highest = 0
    for number, what in enumerate(steps):
        if what == "get":
            assert queue.get(NOW_S) == (model.popleft() if model else None)
        elif what == "put":
            fits = len(model) < bound
            assert queue.put(number, NOW_S) is fits
            if fits:
                model.append(number)
                passed += 1
        else:
            oldest = model.popleft() if len(model) == bound else None
            assert queue.push(number) == oldest
            dropped += oldest is not None
            model.append(number)
            passed += 1
        highest = max(highest, len(model))
        assert queue.state == QueueState("q", len(model), bound, highest, passed, dropped)
