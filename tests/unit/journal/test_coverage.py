"""The ledger: every second of every point once, in the first category that applies."""

import math
from dataclasses import replace

import pytest
from hypothesis import given
from hypothesis import strategies as st

from humbell.journal import Account, Journal, open_for_reading, totals
from humbell.journal.coverage import account
from humbell.model import Cause, Coverage, Measure, Moment, PointId, Quality, Reading
from unit.journal.given import DE, HOUR_NS, NDE, START_NS, WATCHED, Clock, commit, lost, reading

READINGS = st.builds(
    reading,
    second=st.floats(0, 1e6),
    value=st.floats(0, 100) | st.just(math.nan),
    point=st.sampled_from([DE, NDE]),
    span_s=st.floats(0.001, 1000),
    quality=st.sampled_from(Quality),
    cause=st.none() | st.sampled_from(Cause),
)
# The category in which the seconds of each cause count, as the words of the design have it.
CATEGORIES = {
    (Quality.GOOD, None): Coverage.MEASURED,
    (Quality.BAD, Cause.DAEMON_DOWN): Coverage.DAEMON_DOWN,
    (Quality.BAD, Cause.NO_SAMPLES): Coverage.NO_SAMPLES,
    (Quality.BAD, Cause.INCOMPLETE): Coverage.NO_SAMPLES,
    (Quality.BAD, Cause.NON_FINITE): Coverage.SENSOR_FAULT,
    (Quality.BAD, Cause.FLAT): Coverage.SENSOR_FAULT,
    (Quality.BAD, Cause.CLIPPED): Coverage.SENSOR_FAULT,
    (Quality.UNCERTAIN, Cause.CLIPPED): Coverage.MEASURED,
    (Quality.BAD, Cause.DC_STEP): Coverage.SETTLING,
    (Quality.BAD, Cause.SETTLING): Coverage.SETTLING,
    (Quality.UNCERTAIN, Cause.SHORT_PIECE): Coverage.MEASURED,
}


def ledger(kept: Journal, *span_ns: int) -> dict[PointId, dict[Coverage, Account]]:
    """Return what a reader sees of the ledger."""
    with open_for_reading(kept.settings.path) as connection:
        return totals(connection, *span_ns)


def all_measures(one: Reading) -> list[Reading]:
    """Return *one* for each of the measures, as a frame brings them."""
    return [replace(one, measure=measure) for measure in Measure]


@given(st.lists(READINGS, max_size=50))
def test_all_seconds_are_in_the_ledger(readings: list[Reading]) -> None:
    """Whatever their quality and cause, a point's accounts add up to the spans of its readings, to a microsecond."""
    accounts = account(readings, WATCHED.counted, WATCHED.judged, clock_known=True)
    for point in (DE, NDE):
        spans = math.fsum(one.span_s for one in readings if one.point == point.point)
        seconds = math.fsum(entry.seconds for (whose, _), entry in accounts.items() if whose == point)
        assert seconds == pytest.approx(spans, abs=1e-6)


def test_each_second_counts_once_though_four_measures_are_stored(kept: Journal) -> None:
    """A minute is a minute, committed at once or in two parts."""
    for first in (1, 31):
        commit(kept, [one for second in range(first, first + 30) for one in all_measures(reading(second))])
    assert ledger(kept) == {DE: {Coverage.MEASURED: Account(60.0, 60.0, 0.0)}}


@pytest.mark.parametrize(("why", "category"), CATEGORIES.items())
def test_seconds_count_where_their_cause_belongs(
    why: tuple[Quality, Cause | None], category: Coverage, kept: Journal
) -> None:
    """Silence is never measured; what is still a lower bound is."""
    quality, cause = why
    commit(kept, all_measures(reading(2, span_s=2.0, quality=quality, cause=cause)))
    assert {name: entry.seconds for name, entry in ledger(kept)[DE].items()} == {category: 2.0}


def test_every_cause_has_its_place() -> None:
    """A new cause has to be put into the table above."""
    assert {cause for _, cause in CATEGORIES} == {None, *Cause}


def test_categories_are_told_by_precedence(kept: Journal) -> None:
    """In the order in which they apply, whichever came first."""
    commit(kept, [reading(1), lost(2, cause=Cause.SETTLING), lost(3, cause=Cause.FLAT)])
    commit(kept, [lost(4), lost(5, cause=Cause.DAEMON_DOWN)])
    assert list(ledger(kept)[DE]) == [
        Coverage.DAEMON_DOWN,
        Coverage.NO_SAMPLES,
        Coverage.SENSOR_FAULT,
        Coverage.SETTLING,
        Coverage.MEASURED,
    ]


def test_only_measured_seconds_with_a_limit_are_judged(kept: Journal) -> None:
    """Watched is not judged: the second point has no limit, and no limit sees lost signal."""
    commit(kept, [reading(1), lost(2), reading(1, point=NDE)])
    found = ledger(kept)
    assert found[DE] == {Coverage.NO_SAMPLES: Account(1.0, 0.0, 0.0), Coverage.MEASURED: Account(1.0, 1.0, 0.0)}
    assert found[NDE] == {Coverage.MEASURED: Account(1.0, 0.0, 0.0)}


def test_seconds_under_an_unset_clock_are_marked(kept: Journal, clock: Clock) -> None:
    """They count as what they were, and the reader learns that their time is not sure."""
    clock.now = Moment("boot-1", 0, 0, clock_known=False)
    commit(kept, [reading(1), lost(2)])
    clock.now = Moment("boot-1", 0, START_NS, clock_known=True)
    commit(kept, [reading(3)])
    assert ledger(kept)[DE] == {
        Coverage.NO_SAMPLES: Account(1.0, 0.0, 1.0),
        Coverage.MEASURED: Account(2.0, 2.0, 1.0),
    }


def test_a_point_that_is_not_counted_is_not_in_the_ledger(kept: Journal) -> None:
    """What the configuration does not know is nobody's coverage."""
    commit(kept, [reading(1, point=PointId("p-999", "de-h")), reading(1, measure=Measure.CREST_FACTOR)])
    assert ledger(kept) == {}


def test_a_part_of_the_time_can_be_asked_for(kept: Journal) -> None:
    """A commit belongs to the time at which it begins; parts that follow each other add up to the whole."""
    for hour in range(3):
        commit(kept, [reading(3600 * hour + second) for second in range(1, 11 + hour)])
    whole = ledger(kept)[DE][Coverage.MEASURED].seconds
    parts = [ledger(kept, START_NS + hour * HOUR_NS, START_NS + (hour + 1) * HOUR_NS) for hour in range(3)]
    assert [part[DE][Coverage.MEASURED].seconds for part in parts] == [10.0, 11.0, 12.0]
    assert whole == 33.0
    assert ledger(kept, START_NS + 3 * HOUR_NS) == {}


def test_the_stored_order_of_categories_is_the_order_of_precedence() -> None:
    """They are stored by number: a new one in between would change the meaning of what is there."""
    assert list(Coverage) == [
        Coverage.OUT_OF_SERVICE,
        Coverage.DAEMON_DOWN,
        Coverage.NO_SAMPLES,
        Coverage.SENSOR_FAULT,
        Coverage.SETTLING,
        Coverage.NOT_RUNNING,
        Coverage.MEASURED,
    ]


def test_many_commits_add_up_to_a_microsecond(kept: Journal) -> None:
    """Spans that are no round numbers, over many commits, lose nothing on the way through the file."""
    spans = [0.1 + number / 7 for number in range(300)]
    for start in range(0, 300, 30):
        commit(kept, [reading(1000 + start + n, span_s=span) for n, span in enumerate(spans[start : start + 30])])
    assert ledger(kept)[DE][Coverage.MEASURED].seconds == pytest.approx(math.fsum(spans), abs=1e-6)
