"""The pure step of one limit, told as lives: value after value, and where the limit stands after each."""

import math
from itertools import pairwise
from typing import NamedTuple

import pytest
from hypothesis import given
from hypothesis import strategies as st

from humbell.alarms import Limit, LimitState, interrupted, step

# At 10 and above the value speaks for the alarm, below 8 for the return; three seconds raise, two let it return.
LIMIT = Limit(on=10.0, off=8.0, on_need=3.0, off_need=2.0)
NAN = math.nan


class Value(NamedTuple):
    """One value of a life, and what is expected after it."""

    value: float
    up: bool
    counted: float
    span: float = 1.0
    may_clear: bool = True


class Gap(NamedTuple):
    """A gap too long to be bridged, and what is expected after it."""

    up: bool
    counted: float


Life = list[Value | Gap]

LIVES: dict[str, Life] = {
    "the on-delay runs at and above the limit": [
        Value(10.0, up=False, counted=1),
        Value(99.0, up=False, counted=2),
        Value(10.0, up=True, counted=0),
    ],
    "just below the limit is not the limit": [Value(math.nextafter(10.0, 0), up=False, counted=0)] * 5,
    "the on-delay holds inside the deadband": [
        Value(11.0, up=False, counted=1),
        Value(9.0, up=False, counted=1),
        Value(8.0, up=False, counted=1),
        Value(11.0, up=False, counted=2),
        Value(9.9, up=False, counted=2),
        Value(11.0, up=True, counted=0),
    ],
    "the on-delay is reset below the deadband": [
        Value(11.0, up=False, counted=1),
        Value(11.0, up=False, counted=2),
        Value(math.nextafter(8.0, 0), up=False, counted=0),
        Value(11.0, up=False, counted=1),
        Value(11.0, up=False, counted=2),
        Value(11.0, up=True, counted=0),
    ],
    "the off-delay runs below the deadband": [
        *[Value(11.0, up=False, counted=1), Value(11.0, up=False, counted=2), Value(11.0, up=True, counted=0)],
        Value(7.9, up=True, counted=1),
        Value(0.0, up=False, counted=0),
    ],
    "the off-delay holds inside the deadband": [
        Value(11.0, up=True, counted=0, span=3),
        Value(7.0, up=True, counted=1),
        Value(8.0, up=True, counted=1),
        Value(9.9, up=True, counted=1),
        Value(7.0, up=False, counted=0),
    ],
    "the off-delay is reset at the limit": [
        Value(11.0, up=True, counted=0, span=3),
        Value(7.0, up=True, counted=1),
        Value(10.0, up=True, counted=0),
        Value(7.0, up=True, counted=1),
        Value(7.0, up=False, counted=0),
    ],
    "inside the deadband an alarm that is up stays up for ever": [
        Value(11.0, up=True, counted=0, span=3),
        *[Value(9.0, up=True, counted=0, span=1000)] * 3,
    ],
    "no number changes nothing": [
        Value(NAN, up=False, counted=0),
        Value(11.0, up=False, counted=1),
        Value(NAN, up=False, counted=1, span=1000),
        Value(11.0, up=False, counted=2),
        Value(11.0, up=True, counted=0),
        Value(NAN, up=True, counted=0, span=1000),
        Value(7.0, up=True, counted=1),
        Value(NAN, up=True, counted=1),
        Value(7.0, up=False, counted=0),
    ],
    "a gap forgets the running on-delay": [
        Value(11.0, up=False, counted=2, span=2),
        Gap(up=False, counted=0),
        Value(11.0, up=False, counted=2, span=2),
        Value(11.0, up=True, counted=0),
    ],
    "a gap forgets the running off-delay and leaves the alarm up": [
        Value(11.0, up=True, counted=0, span=3),
        Value(7.0, up=True, counted=1),
        Gap(up=True, counted=0),
        Value(7.0, up=True, counted=1),
        Value(7.0, up=False, counted=0),
    ],
    "a lower bound may raise": [
        Value(11.0, up=False, counted=1, may_clear=False),
        Value(11.0, up=False, counted=2, may_clear=False),
        Value(11.0, up=True, counted=0, may_clear=False),
    ],
    "a lower bound below the deadband neither clears nor resets": [
        Value(11.0, up=False, counted=1),
        Value(1.0, up=False, counted=1, may_clear=False),
        Value(11.0, up=True, counted=0, span=2),
        *[Value(1.0, up=True, counted=0, span=1000, may_clear=False)] * 3,
        Value(1.0, up=True, counted=1),
        Value(1.0, up=True, counted=1, span=1000, may_clear=False),
        Value(1.0, up=False, counted=0),
    ],
    "a lower bound at the limit resets the off-delay": [
        Value(11.0, up=True, counted=0, span=3),
        Value(7.0, up=True, counted=1),
        Value(11.0, up=True, counted=0, may_clear=False),
        Value(7.0, up=True, counted=1),
    ],
    "one long value counts its whole span": [
        Value(11.0, up=False, counted=2.5, span=2.5),
        Value(11.0, up=True, counted=0, span=60),
        Value(1.0, up=False, counted=0, span=60),
    ],
    "infinity is above any limit": [Value(math.inf, up=True, counted=0, span=3)],
}


def after(state: LimitState, event: Value | Gap, limit: Limit = LIMIT) -> LimitState:
    if isinstance(event, Gap):
        return interrupted(state)
    return step(state, event.value, event.span, limit, may_clear=event.may_clear)


@pytest.mark.parametrize("name", LIVES)
def test_a_limit_lives_as_written(name: str) -> None:
    """On-delay at or above the limit, held in the deadband, reset below it; the off-delay is its mirror image."""
    state = LimitState()
    for number, event in enumerate(LIVES[name]):
        state = after(state, event)
        assert state == LimitState(event.up, event.counted), f"{name}: event {number}, {event}"


def test_frames_of_a_tenth_of_a_second_add_up() -> None:
    """A hundred times 0.1 s is 9.99999... s in floating point, and fulfils a delay of 10 s, no frame too late."""
    limit = Limit(on=10.0, off=8.0, on_need=10.0, off_need=30.0)
    state = LimitState()
    for number in range(1, 101):
        state = step(state, 11.0, 0.1, limit)
        assert state.up is (number == 100)
    for number in range(1, 301):
        state = step(state, 1.0, 0.1, limit)
        assert state.up is (number < 300)


def test_without_delays_one_value_is_enough() -> None:
    """A delay of zero raises at the first value at the limit, and returns at the first one below the deadband."""
    limit = Limit(on=10.0, off=8.0, on_need=0.0, off_need=0.0)
    ups = []
    state = LimitState()
    for value in (9.9, 10.0, 9.0, 8.0, 7.9, 9.9, 10.0):
        state = step(state, value, 1.0, limit)
        ups.append(state.up)
    assert ups == [False, True, True, True, False, False, True]


def test_without_a_deadband_the_limit_alone_decides() -> None:
    """With a deadband of zero every value counts for one side or the other."""
    limit = Limit(on=10.0, off=10.0, on_need=2.0, off_need=2.0)
    state = LimitState()
    told = []
    for value in (10.0, 9.9, 10.0, 10.0, 9.9, 10.0, 9.9, 9.9):
        state = step(state, value, 1.0, limit)
        told.append((state.up, state.counted))
    assert told == [(False, 1), (False, 0), (False, 1), (True, 0), (True, 1), (True, 0), (True, 1), (False, 0)]


VALUES = st.sampled_from([0.0, 7.9, 8.0, 9.0, 9.9, 10.0, 12.0, NAN])
SPANS = st.integers(1, 64).map(lambda parts: parts / 16)  # sums of sixteenths are exact
EVENTS = st.one_of(
    st.builds(
        lambda value, span, clear: Value(value, up=False, counted=0, span=span, may_clear=clear),
        VALUES,
        SPANS,
        st.booleans(),
    ),
    st.just(Gap(up=False, counted=0)),
)


def seconds_for(life: list[Value | Gap], *, up: bool) -> float:
    """Return, read backwards, how long the end of *life* speaks for one side without a gap or a word against it."""
    seconds = 0.0
    for event in reversed(life):
        if isinstance(event, Gap):
            break
        if event.value >= LIMIT.on:
            if not up:
                break
            seconds += event.span
        elif event.value < LIMIT.off and event.may_clear:
            if up:
                break
            seconds += event.span
    return seconds


@given(st.lists(EVENTS, max_size=60))
def test_it_never_changes_sides_before_its_time(life: list[Value | Gap]) -> None:
    """Up only when the last unbroken run holds on_need seconds at or above the limit; down likewise below it."""
    states = [LimitState()]
    for event in life:
        states.append(after(states[-1], event))
    for number, (before, now) in enumerate(pairwise(states), start=1):
        if now.up and not before.up:
            assert seconds_for(life[:number], up=True) >= LIMIT.on_need
        if before.up and not now.up:
            assert seconds_for(life[:number], up=False) >= LIMIT.off_need


@given(st.lists(EVENTS, max_size=60))
def test_it_changes_sides_when_the_time_has_come(life: list[Value | Gap]) -> None:
    """No state lasts once the other side has had its seconds: an alarm is never late by more than the last value."""
    state = LimitState()
    for number, event in enumerate(life, start=1):
        state = after(state, event)
        if seconds_for(life[:number], up=True) >= LIMIT.on_need:
            assert state.up
        if seconds_for(life[:number], up=False) >= LIMIT.off_need:
            assert not state.up


@given(st.lists(st.tuples(EVENTS, st.integers(1, 8)), max_size=40))
def test_one_long_value_is_many_short_ones(life: list[tuple[Value | Gap, int]]) -> None:
    """Splitting a value of span s into parts of the same value, which add up to s, changes nothing."""
    whole = parts = LimitState()
    for event, count in life:
        whole = after(whole, event)
        pieces = [event._replace(span=event.span / count)] * count if isinstance(event, Value) else [event]
        for piece in pieces:
            parts = after(parts, piece)
        assert parts.up == whole.up
        assert parts.counted == pytest.approx(whole.counted, abs=1e-9)
