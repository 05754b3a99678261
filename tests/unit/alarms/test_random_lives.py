"""Rules that hold for one alarm in any life: what may happen, drawn at random, with restarts and people in between."""

from dataclasses import replace
from itertools import pairwise

from hypothesis import given
from hypothesis import strategies as st

from humbell.alarms import AlarmState, Event, act, in_alarm
from humbell.model import Cause, LifeCycle, Quality, Reading, Transition
from unit.alarms.life import PLAN, Life, again, doubtful, good, lost, piece

VALUES = st.sampled_from([0.0, 4.1, 4.2, 4.4, 4.5, 9.0])
SPANS = st.sampled_from([0.25, 0.5, 1.0, 1.0, 1.0, 2.0, 4.0])  # sums of quarters are exact
READINGS = st.one_of(
    st.builds(good, VALUES, SPANS),
    st.builds(good, VALUES, SPANS),
    st.builds(doubtful, st.sampled_from(list(Cause)), VALUES, SPANS),
    st.builds(lost, SPANS),
)
ACTS = st.sampled_from([Event.ACKNOWLEDGE, Event.RESET])
LIVES = st.lists(st.one_of(READINGS, READINGS, READINGS, ACTS), max_size=50)
PIECES = st.lists(st.one_of(READINGS.map(piece), READINGS.map(piece), ACTS), max_size=40)


def lived(story: list[Reading | Event], *, restarts: bool = False, latching: bool = False) -> list[AlarmState]:
    """Return the states of a life, the first one included; what it told is checked to be their changes."""
    life = Life(replace(PLAN, latching=latching), restarts=restarts)
    states = [life.state]
    told: list[Transition] = []
    for event in story:
        if isinstance(event, Event):
            before = again(life.state) if restarts else life.state
            life.state, transition = act(before, event, life.plan, life.now_ns)
            told = [transition] if transition else []
        else:
            told = life.live(event)
        before, now = states[-1], life.state
        changed = (before.life_cycle, before.verified) != (now.life_cycle, now.verified)
        assert [(one.before, one.after, one.verified) for one in told] == (
            [(before.life_cycle, now.life_cycle, now.verified)] if changed else []
        )
        states.append(now)
    return states


def good_below_s(story: list[Reading | Event]) -> float:
    """Return, read backwards, the seconds of good values below limit - deadband since one that reached the limit."""
    seconds = 0.0
    for event in reversed(story):
        if isinstance(event, Event):
            continue
        counts = event.quality is Quality.GOOD or event.cause in {Cause.CLIPPED, Cause.SHORT_PIECE}
        if counts and event.value >= PLAN.limit.on:
            break
        if event.quality is Quality.GOOD and event.value < PLAN.limit.off:
            seconds += 1.0 if event.piece else event.span_s
    return seconds


@given(LIVES, st.booleans())
def test_no_alarm_returns_without_its_seconds_of_good_low_values(story: list[Reading | Event], latching: bool) -> None:
    """Whatever else happens, off_delay_s of good values below limit - deadband stand behind every return."""
    states = lived(story, latching=latching)
    for number, (before, now) in enumerate(pairwise(states), start=1):
        if in_alarm(before.life_cycle) and not in_alarm(now.life_cycle):
            assert good_below_s(story[:number]) >= PLAN.limit.off_need


@given(PIECES)
def test_no_alarm_returns_without_its_good_low_pieces(story: list[Reading | Event]) -> None:
    """The same of separate records, by number."""
    states = lived(story)
    for number, (before, now) in enumerate(pairwise(states), start=1):
        if in_alarm(before.life_cycle) and not in_alarm(now.life_cycle):
            assert good_below_s(story[:number]) >= PLAN.piece_limit.off_need


@given(LIVES, st.booleans())
def test_every_raise_is_a_new_occurrence(story: list[Reading | Event], latching: bool) -> None:
    """No two raises share an id, and an alarm has one exactly where it is not normal."""
    states = lived(story, latching=latching)
    raised = [
        now.occurrence
        for before, now in pairwise(states)
        if not in_alarm(before.life_cycle) and in_alarm(now.life_cycle)
    ]
    assert None not in raised
    assert len(set(raised)) == len(raised)
    for state in states:
        assert (state.occurrence is None) is (state.life_cycle is LifeCycle.NORMAL)


@given(LIVES, st.booleans())
def test_the_alarm_condition_and_the_life_cycle_never_disagree(story: list[Reading | Event], latching: bool) -> None:
    """The limit is up exactly where the life cycle is in alarm: neither forgets what the other knows."""
    for state in lived(story, latching=latching):
        assert state.limit.up is in_alarm(state.life_cycle)


@given(LIVES, PIECES, st.booleans())
def test_a_restart_at_any_point_changes_nothing(
    story: list[Reading | Event], pieces: list[Reading | Event], latching: bool
) -> None:
    """A life that is stopped, written, read and started again at every step is the same life."""
    both = story + pieces
    assert lived(both, restarts=True, latching=latching) == lived(both, latching=latching)


@given(LIVES)
def test_no_alarm_stays_verified_through_three_useless_frames(story: list[Reading | Event]) -> None:
    """Where the last three seconds held no good value and no bound at the limit, nothing stands behind the alarm."""
    for number, state in enumerate(lived(story)):
        blind_s = 0.0
        for event in reversed(story[:number]):
            if isinstance(event, Event):
                continue
            bound = event.cause in {Cause.CLIPPED, Cause.SHORT_PIECE} and event.value >= PLAN.limit.on
            if event.quality is Quality.GOOD or bound:
                break
            blind_s += event.span_s
        assert state.blind == blind_s
        if blind_s >= 3 * PLAN.frame_s:
            assert not state.verified
