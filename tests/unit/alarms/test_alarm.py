"""One alarm: what raises it, what clears it, what leaves it unknown, and what it tells."""

import math
from dataclasses import replace

import pytest

from humbell.alarms import AlarmState, Event, LimitState, act
from humbell.model import Cause, LifeCycle, Quality, Transition
from unit.alarms.life import ALARM, PLAN, SECOND_NS, Life, again, doubtful, good, lost, name, piece, raised

NORMAL, UNACKNOWLEDGED, ACKNOWLEDGED = LifeCycle.NORMAL, LifeCycle.UNACKNOWLEDGED, LifeCycle.ACKNOWLEDGED
RETURNED = LifeCycle.RETURNED_UNACKNOWLEDGED
MAY_RAISE = [Cause.CLIPPED, Cause.SHORT_PIECE]
MAY_NOT = [cause for cause in Cause if cause not in MAY_RAISE]


def test_nothing_is_healthy_by_default() -> None:
    """An alarm begins as normal but not verified; the first good value verifies it, and that is told."""
    life = Life()
    assert not life.state.verified
    assert life.live(good(3.0)) == [
        Transition(SECOND_NS, ALARM, NORMAL, NORMAL, verified=True, value=3.0, limit=4.5, occurrence=None)
    ]
    assert life.live(good(3.0), good(4.4), good(3.0)) == []


def test_a_raise_and_a_return_tell_time_value_limit_and_occurrence() -> None:
    """What brought the transition stands in it: end of the frame, value, limit, and the same occurrence for both."""
    life = Life()
    life.live(good(3.0))
    told = life.live(*[good(5.0 + number / 10) for number in range(4)])
    assert told == [
        Transition(
            4 * SECOND_NS,
            ALARM,
            NORMAL,
            UNACKNOWLEDGED,
            verified=True,
            value=5.2,
            limit=4.5,
            occurrence="velocity_rms.high@4",
        )
    ]
    told = life.live(*[good(4.0 - number / 10) for number in range(6)])
    assert told == [
        Transition(
            10 * SECOND_NS,
            ALARM,
            UNACKNOWLEDGED,
            RETURNED,
            verified=True,
            value=3.6,
            limit=4.5,
            occurrence="velocity_rms.high@4",
        )
    ]


@pytest.mark.parametrize("cause", Cause)
def test_a_value_without_good_quality_never_clears(cause: Cause) -> None:
    """However low and however long: neither a doubtful value nor none at all lets an alarm return."""
    life = raised()
    for value in (0.0, 4.1, math.nan):
        life.live(*[doubtful(cause, value)] * 20)
    assert life.state.life_cycle is UNACKNOWLEDGED
    assert life.state.limit.up


@pytest.mark.parametrize("cause", Cause)
def test_a_doubtful_low_value_does_not_run_the_off_delay(cause: Cause) -> None:
    """Four good low values and one doubtful one are four seconds, not five."""
    life = raised()
    assert life.live(*[good(1.0)] * 4, doubtful(cause, 1.0)) == []
    assert [told.after for told in life.live(good(1.0))] == [RETURNED]


@pytest.mark.parametrize("cause", MAY_RAISE)
def test_a_lower_bound_at_the_limit_raises_and_verifies(cause: Cause) -> None:
    """What is at least so much is above the limit, whatever the true value; it stands behind the alarm, too."""
    life = Life()
    told = life.live(*[doubtful(cause, 5.0)] * 3)
    assert [(one.before, one.after, one.verified) for one in told] == [
        (NORMAL, NORMAL, True),
        (NORMAL, UNACKNOWLEDGED, True),
    ]


@pytest.mark.parametrize("cause", MAY_RAISE)
def test_a_bad_lower_bound_raises_like_an_uncertain_one(cause: Cause) -> None:
    """Much clipping makes a value bad, but it stays a lower bound."""
    life = Life()
    life.live(*[replace(doubtful(cause, 5.0), quality=Quality.BAD)] * 3)
    assert life.state.life_cycle is UNACKNOWLEDGED


@pytest.mark.parametrize("cause", MAY_RAISE)
def test_a_lower_bound_below_the_limit_tells_nothing(cause: Cause) -> None:
    """It neither verifies nor counts: the true value may be anywhere above it."""
    life = Life()
    assert life.live(*[doubtful(cause, 4.4)] * 10) == []
    assert not life.state.verified


@pytest.mark.parametrize("cause", MAY_NOT)
def test_nothing_else_than_a_good_value_or_a_lower_bound_raises(cause: Cause) -> None:
    """Settling filters, dead and stepping sensors show numbers that no alarm may be raised from."""
    life = Life()
    assert life.live(*[doubtful(cause, 99.0)] * 100) == []
    assert life.state == replace(AlarmState(), blind=100.0, last_ns=100 * SECOND_NS)


@pytest.mark.parametrize("cause", MAY_NOT)
def test_silence_makes_an_alarm_unverified_at_the_third_frame(cause: Cause) -> None:
    """Two frames may be missed. At the third nobody knows any more, and that is told, once."""
    for life, state in ((Life(), NORMAL), (raised(), UNACKNOWLEDGED)):
        life.live(good(5.0) if state is UNACKNOWLEDGED else good(1.0))
        occurrence = life.state.occurrence
        assert life.live(doubtful(cause), doubtful(cause)) == []
        (told,) = life.live(doubtful(cause))
        assert (told.before, told.after, told.verified, told.occurrence) == (state, state, False, occurrence)
        assert life.live(*[doubtful(cause)] * 10) == []


def test_one_long_loss_is_as_much_silence_as_many_short_ones() -> None:
    """Silence counts by its length in frames: 2.9 s of lost signal are less than three frames, 3 s are three."""
    for span_s, verified in ((2.9, True), (3.0, False)):
        life = raised()
        life.live(lost(span_s))
        assert life.state.verified is verified
    slow = replace(PLAN, frame_s=5.0)
    for span_s, verified in ((14.9, True), (15.0, False)):
        life = raised(slow)
        life.live(lost(span_s))
        assert life.state.verified is verified


def test_a_good_value_verifies_again() -> None:
    """The first good value after a silence is told, in whatever state the alarm stands, and the count begins anew."""
    life = raised()
    life.live(lost(60.0))
    (told,) = life.live(good(4.3))
    assert (told.before, told.after, told.verified) == (UNACKNOWLEDGED, UNACKNOWLEDGED, True)
    assert life.live(lost(), lost()) == []
    assert life.state.verified


def test_one_lost_frame_is_bridged() -> None:
    """The running delay goes on behind one lost frame, which itself does not count."""
    life = Life()
    life.live(good(5.0), good(5.0), lost())
    assert life.state.limit == LimitState(up=False, counted=2.0)
    life.live(good(5.0))
    assert life.state.life_cycle is UNACKNOWLEDGED


def test_a_longer_gap_resets_the_running_delay() -> None:
    """More than a frame is unknown time, which may not count for either side: on-delay and off-delay begin anew."""
    for gap in ([lost(1.1)], [lost(), lost()], [lost(0.6), doubtful(Cause.SETTLING, 9.0)]):
        life = Life()
        life.live(good(5.0), good(5.0), *gap, good(5.0), good(5.0))
        assert life.state.life_cycle is NORMAL
        life.live(good(5.0))
        assert life.state.life_cycle is UNACKNOWLEDGED
        life.live(*[good(1.0)] * 4, *gap, *[good(1.0)] * 4)
        assert life.state.life_cycle is UNACKNOWLEDGED
        life.live(good(1.0))
        assert life.state.life_cycle is RETURNED


def test_pieces_count_by_number() -> None:
    """Two separate records raise and three let it return, however short they are and however far apart."""
    life = Life()
    life.live(piece(good(5.0, 0.5)), every_s=600)
    assert life.state.life_cycle is NORMAL
    life.live(piece(good(5.0, 0.5)), every_s=600)
    assert life.state.life_cycle is UNACKNOWLEDGED
    life.live(*[piece(good(1.0, 8.0))] * 2, every_s=600)
    assert life.state.life_cycle is UNACKNOWLEDGED
    life.live(piece(good(1.0, 8.0)), every_s=600)
    assert life.state.life_cycle is RETURNED


def test_a_piece_that_comes_too_late_begins_a_new_count() -> None:
    """Pieces further apart than piece_age_s do not count together, for either side; exactly so far apart they do."""
    for every_s, together in ((3600.0, True), (3600.5, False)):
        life = Life()
        life.live(*[piece(good(5.0))] * 2, every_s=every_s)
        assert (life.state.life_cycle is UNACKNOWLEDGED) is together
        life = raised()
        life.live(*[piece(good(1.0))] * 3, every_s=every_s)
        assert (life.state.life_cycle is RETURNED) is together


def test_one_useless_piece_is_bridged_and_three_are_silence() -> None:
    """A piece counts as one frame where silence is counted."""
    life = Life()
    life.live(piece(good(5.0)), piece(doubtful(Cause.FLAT)), piece(good(5.0)), every_s=600)
    assert life.state.life_cycle is UNACKNOWLEDGED
    life.live(*[piece(doubtful(Cause.FLAT))] * 2, every_s=600)
    assert life.state.verified
    life.live(piece(doubtful(Cause.FLAT)), every_s=600)
    assert not life.state.verified


def test_each_raise_has_an_occurrence_of_its_own() -> None:
    """A raise before anybody looked is a new occurrence; a normal alarm has none."""
    life = raised()
    first = life.state.occurrence
    life.live(good(1.0, 5.0))
    assert life.state.occurrence == first
    life.live(good(5.0, 3.0))
    second = life.state.occurrence
    assert (first, second) == ("velocity_rms.high@3", "velocity_rms.high@11")
    life.state, _ = act(life.state, Event.ACKNOWLEDGE, PLAN, life.now_ns)
    assert life.state.occurrence == second
    (told,) = life.live(good(1.0, 5.0))
    assert (told.before, told.after, told.occurrence) == (ACKNOWLEDGED, NORMAL, second)
    assert life.state.occurrence is None


def test_a_person_acknowledges_and_resets() -> None:
    """What a person does is a transition without a value; it leaves limit, silence and verification alone."""
    life = raised(replace(PLAN, latching=True))
    life.live(good(1.0, 2.0))
    before = life.state
    life.state, told = act(before, Event.ACKNOWLEDGE, life.plan, 7)
    assert told is not None
    assert math.isnan(told.value)
    assert replace(told, value=0.0) == Transition(
        7, ALARM, UNACKNOWLEDGED, ACKNOWLEDGED, verified=True, value=0.0, limit=4.5, occurrence="velocity_rms.high@3"
    )
    assert life.state == replace(before, life_cycle=ACKNOWLEDGED)
    (latched,) = life.live(good(1.0, 3.0))
    assert latched.after is LifeCycle.LATCHED_ACKNOWLEDGED
    life.state, told = act(life.state, Event.RESET, life.plan, 8)
    assert told is not None
    assert (told.after, told.occurrence, life.state.occurrence) == (NORMAL, "velocity_rms.high@3", None)


@pytest.mark.parametrize("event", [Event.ACKNOWLEDGE, Event.RESET])
def test_what_a_person_does_to_a_normal_alarm_tells_nothing(event: Event) -> None:
    """An acknowledgement that comes too late, or twice, is no transition."""
    life = Life()
    life.live(good(1.0))
    assert act(life.state, event, PLAN, 7) == (life.state, None)
    life = raised()
    once, _ = act(life.state, Event.ACKNOWLEDGE, PLAN, 7)
    assert act(once, Event.ACKNOWLEDGE, PLAN, 8) == (once, None)


def test_a_state_survives_being_written_and_read() -> None:
    """All of a state is plain data: JSON brings it back as it was."""
    life = raised()
    life.live(good(1.0), lost(0.3))
    assert again(life.state) == life.state
    assert name(ALARM, life.now_ns) == "velocity_rms.high@4.3"
