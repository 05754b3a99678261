"""When a link tries again, and what it asks for: pure rules, no sockets."""

import itertools

import pytest

from humbell.wire.backoff import BREAK_S, BREAKS, MOST_S, PATIENT_S, Backoff, Breaks
from humbell.wire.events import Reason, Subscribed
from humbell.wire.subscriptions import ASK_AGAIN_S, Subscriptions

GRANTED, DENIED = Reason(1, "Granted QoS 1"), Reason(0x87, "Not authorized")


@pytest.mark.parametrize(("random", "share"), [(0.0, 0.5), (0.5, 0.75), (1.0, 1.0)])
def test_waiting_times_double_up_to_a_bound_and_are_spread(random: float, share: float) -> None:
    """Half to all of 0.5, 1, 2, 4, 8, 8, ... s, so that a link is up again within 10 s of the end of a fault."""
    backoff = Backoff(lambda: random)
    assert [backoff.next_s() for _ in range(7)] == [share * one for one in (0.5, 1, 2, 4, 8, 8, 8)]
    backoff.reset()
    assert backoff.next_s() == share * 0.5
    assert MOST_S <= 8.0


def test_what_a_person_has_to_cure_is_asked_about_seldom() -> None:
    """At most twice a minute, and that does not lengthen the other waits."""
    values = itertools.cycle([0.0, 1.0])
    backoff = Backoff(lambda: next(values))
    assert [backoff.next_s(patient=True) for _ in range(2)] == [PATIENT_S, 2 * PATIENT_S]
    assert PATIENT_S >= 30.0
    assert backoff.next_s() == 0.25


def test_connections_that_break_again_and_again_are_a_habit() -> None:
    """Several short ones in a row; a long one, or anything else in between, begins anew."""
    breaks = Breaks()
    told = [breaks.count(lasted_s=1.0) for _ in range(BREAKS + 2)]
    assert told == [False] * (BREAKS - 1) + [True] * 3
    assert breaks.count(lasted_s=BREAK_S - 1) is True
    assert breaks.count(lasted_s=BREAK_S) is False
    for _ in range(10):
        assert breaks.count(lasted_s=1.0) is False
        breaks.reset()


def ask(subscriptions: Subscriptions, mid: int, now_s: float) -> list[str]:
    wanted, _ = subscriptions.due(now_s)
    if wanted:
        subscriptions.ask(mid, wanted, now_s)
    return wanted


def test_topics_are_asked_for_once_on_each_connection() -> None:
    """Those that are added later are asked for on their own."""
    subscriptions = Subscriptions()
    assert subscriptions.settled
    subscriptions.want(["b", "a"])
    assert not subscriptions.settled
    assert ask(subscriptions, 1, 0.0) == ["a", "b"]
    assert ask(subscriptions, 2, 0.0) == []
    assert subscriptions.answer(Subscribed(1, (GRANTED, GRANTED)), 1.0) == {}
    assert subscriptions.settled
    subscriptions.want(["a", "c"])
    assert ask(subscriptions, 3, 2.0) == ["c"]
    subscriptions.renew()
    assert ask(subscriptions, 1, 3.0) == ["a", "b", "c"]


def test_an_answer_that_does_not_come_is_overdue() -> None:
    """The time counts from the question."""
    subscriptions = Subscriptions()
    subscriptions.want(["a"])
    ask(subscriptions, 1, 10.0)
    assert not subscriptions.overdue(15.0, 5.0)
    assert subscriptions.overdue(15.1, 5.0)
    subscriptions.answer(Subscribed(1, (GRANTED,)), 15.2)
    assert not subscriptions.overdue(100.0, 5.0)


def test_what_was_denied_is_asked_for_again_later() -> None:
    """Somebody may have allowed it; until then it is told, and the rest works."""
    subscriptions = Subscriptions()
    subscriptions.want(["a", "b"])
    ask(subscriptions, 1, 0.0)
    assert subscriptions.answer(Subscribed(1, (GRANTED, DENIED)), 1.0) == {"b": DENIED}
    assert subscriptions.settled
    assert subscriptions.denied == {"b": DENIED}
    assert ask(subscriptions, 2, ASK_AGAIN_S) == []
    assert ask(subscriptions, 2, ASK_AGAIN_S + 1.0) == ["b"]
    subscriptions.answer(Subscribed(2, (GRANTED,)), ASK_AGAIN_S + 2.0)
    assert subscriptions.denied == {}


def test_topics_no_longer_wanted_are_left_once() -> None:
    """Even those of an earlier run, which the broker still has for us."""
    subscriptions = Subscriptions()
    subscriptions.want(["a"])
    ask(subscriptions, 1, 0.0)
    subscriptions.answer(Subscribed(1, (GRANTED,)), 1.0)
    subscriptions.drop(["a", "old"])
    assert subscriptions.due(2.0) == ([], ["a", "old"])
    assert subscriptions.due(3.0) == ([], [])
    assert subscriptions.settled
