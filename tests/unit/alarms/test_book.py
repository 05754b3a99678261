"""The book: from settings to alarms, and each reading to the alarms that judge it."""

from dataclasses import replace

import pytest

from humbell.alarms import AlarmState, Book, Event, Limit, LimitSettings, plan_alarms
from humbell.model import AlarmId, AlarmType, LifeCycle, Measure, PointId, Reading, Transition
from unit.alarms.life import SECOND_NS, again, good, name

POINT = PointId("p-101", "de-h")
SETTINGS = LimitSettings(high=4.5, high_high=7.1, deadband=0.3, on_delay_s=3, off_delay_s=5, on_pieces=4, off_pieces=6)
PLANS = plan_alarms(POINT, Measure.VELOCITY_RMS, 1.0, SETTINGS)
HIGH, HIGH_HIGH = (plan.id for plan in PLANS)

NORMAL, UNACKNOWLEDGED = LifeCycle.NORMAL, LifeCycle.UNACKNOWLEDGED


def at(second: int, value: float) -> Reading:
    """Return a good value of one second that ends at *second*."""
    return replace(good(value), time_ns=second * SECOND_NS)


def feed(book: Book, values: list[float], first: int = 1) -> list[tuple[int, str, LifeCycle, LifeCycle]]:
    """Return what *values*, a second each, make of the book: second, alarm, before and after."""
    told = [one for second, value in enumerate(values, first) for one in book.feed(at(second, value))]
    return [(one.time_ns // SECOND_NS, one.alarm.name, one.before, one.after) for one in told]


def test_high_and_high_high_are_two_alarms() -> None:
    """One id each, the same deadband and delays, and each its own threshold for frames and pieces."""
    assert [plan.id for plan in PLANS] == [
        AlarmId("p-101", "de-h", Measure.VELOCITY_RMS, AlarmType.HIGH),
        AlarmId("p-101", "de-h", Measure.VELOCITY_RMS, AlarmType.HIGH_HIGH),
    ]
    assert [plan.id.name for plan in PLANS] == ["velocity_rms.high", "velocity_rms.high_high"]
    assert [plan.limit for plan in PLANS] == [
        Limit(on=4.5, off=4.5 - 0.3, on_need=3, off_need=5),
        Limit(on=7.1, off=7.1 - 0.3, on_need=3, off_need=5),
    ]
    assert [plan.piece_limit for plan in PLANS] == [
        Limit(on=4.5, off=4.5 - 0.3, on_need=4, off_need=6),
        Limit(on=7.1, off=7.1 - 0.3, on_need=4, off_need=6),
    ]
    assert [(plan.piece_age_s, plan.frame_s, plan.latching) for plan in PLANS] == [(3600.0, 1.0, False)] * 2


@pytest.mark.parametrize(
    ("settings", "types"),
    [
        (LimitSettings(), []),
        (LimitSettings(high=4.5), [AlarmType.HIGH]),
        (LimitSettings(high_high=7.1), [AlarmType.HIGH_HIGH]),
    ],
)
def test_a_limit_that_is_not_given_is_no_alarm(settings: LimitSettings, types: list[AlarmType]) -> None:
    """Without any limit nothing is judged; high_high alone is one alarm."""
    assert [plan.id.type for plan in plan_alarms(POINT, Measure.ACCELERATION_RMS, 5.0, settings)] == types


def test_each_alarm_lives_its_own_life() -> None:
    """Beyond both limits both are raised, each with its occurrence; each is acknowledged and returns on its own."""
    book = Book(PLANS, name)
    assert feed(book, [3.0, 5.0, 8.0, 8.0, 8.0]) == [
        (1, "velocity_rms.high", NORMAL, NORMAL),
        (1, "velocity_rms.high_high", NORMAL, NORMAL),
        (4, "velocity_rms.high", NORMAL, UNACKNOWLEDGED),
        (5, "velocity_rms.high_high", NORMAL, UNACKNOWLEDGED),
    ]
    told = book.act(HIGH, Event.ACKNOWLEDGE, 6)
    assert isinstance(told, Transition)
    assert (told.alarm, told.after, told.time_ns) == (HIGH, LifeCycle.ACKNOWLEDGED, 6)
    assert feed(book, [5.0] * 5 + [3.0] * 5, 6) == [
        (10, "velocity_rms.high_high", UNACKNOWLEDGED, LifeCycle.RETURNED_UNACKNOWLEDGED),
        (15, "velocity_rms.high", LifeCycle.ACKNOWLEDGED, NORMAL),
    ]
    assert book.states[HIGH].occurrence is None
    assert book.states[HIGH_HIGH].occurrence == "velocity_rms.high_high@5"


def test_a_reading_reaches_the_alarms_of_its_point_and_measure_alone() -> None:
    """Other machines, points and measures are nobody's business here."""
    book = Book(PLANS, name)
    strangers = [
        replace(at(1, 99.0), machine="p-102"),
        replace(at(1, 99.0), point="de-v"),
        replace(at(1, 99.0), measure=Measure.ACCELERATION_RMS),
    ]
    assert [book.feed(replace(stranger, span_s=60.0)) for stranger in strangers] == [[], [], []]
    assert dict(book.states) == {HIGH: AlarmState(), HIGH_HIGH: AlarmState()}


def test_a_book_goes_on_from_the_states_it_is_given() -> None:
    """States that were kept are taken up; an alarm that is new begins as unknown, one that is gone is forgotten."""
    values = [3.0, 5.0, 8.0, 8.0, 8.0, 5.0, 3.0, 3.0, 3.0, 3.0, 3.0, 3.0]
    whole = feed(Book(PLANS, name), values)
    kept: dict[AlarmId, AlarmState] = {}
    parts = []
    for second, value in enumerate(values, 1):
        book = Book(PLANS, name, kept)
        parts += feed(book, [value], second)
        kept = {alarm: again(state) for alarm, state in book.states.items()}
    assert parts == whole
    gone = AlarmId("p-9", "x", Measure.VELOCITY_RMS, AlarmType.HIGH)
    book = Book(PLANS, name, {HIGH: kept[HIGH], gone: kept[HIGH]})
    assert dict(book.states) == {HIGH: kept[HIGH], HIGH_HIGH: AlarmState()}


def test_what_is_done_to_an_alarm_that_is_not_there_fails() -> None:
    """A command for an unknown alarm is the caller's mistake."""
    book = Book(PLANS[:1], name)
    with pytest.raises(KeyError):
        book.act(HIGH_HIGH, Event.ACKNOWLEDGE, 1)
    assert book.act(HIGH, Event.ACKNOWLEDGE, 1) is None
