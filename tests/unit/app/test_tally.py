"""The tally: every second of a point is exactly one thing, and all of them add up."""

import pytest
from hypothesis import given
from hypothesis import strategies as st

from humbell.app.tally import Tally
from humbell.config import parse
from humbell.model import Cause, Coverage, Measure, PointId, Quality, Reading

SITE = parse(
    """\
site: tarnholm-water
sources: {tape: {kind: replay}}
machines:
  p-101:
    points:
      de-h: {channel: tape/0}
      de-v: {channel: tape/1, velocity: off}
      nde-h: {channel: tape/2, acceleration: off}
""",
    "node.yaml",
)

# What the seconds of each quality and cause are: the design's list in section 2, first that applies.
MEANINGS = [
    (Quality.GOOD, None, Coverage.MEASURED),
    (Quality.BAD, Cause.DAEMON_DOWN, Coverage.DAEMON_DOWN),
    (Quality.BAD, Cause.DAEMON_DOWN, Coverage.DAEMON_DOWN),
    (Quality.BAD, Cause.NO_SAMPLES, Coverage.NO_SAMPLES),
    (Quality.BAD, Cause.INCOMPLETE, Coverage.NO_SAMPLES),
    (Quality.BAD, Cause.NON_FINITE, Coverage.SENSOR_FAULT),
    (Quality.BAD, Cause.FLAT, Coverage.SENSOR_FAULT),
    (Quality.BAD, Cause.CLIPPED, Coverage.SENSOR_FAULT),
    (Quality.UNCERTAIN, Cause.CLIPPED, Coverage.MEASURED),
    (Quality.BAD, Cause.DC_STEP, Coverage.SETTLING),
    (Quality.UNCERTAIN, Cause.SETTLING, Coverage.SETTLING),
    (Quality.UNCERTAIN, Cause.SHORT_PIECE, Coverage.MEASURED),
]


def reading(
    quality: Quality = Quality.GOOD,
    cause: Cause | None = None,
    *,
    point: str = "de-h",
    measure: Measure = Measure.VELOCITY_RMS,
    span_s: float = 1.0,
) -> Reading:
    """Return a reading whose value does not matter."""
    return Reading(0, "p-101", point, measure, 1.0, span_s, quality, cause)


@pytest.mark.parametrize(("quality", "cause", "category"), MEANINGS)
def test_each_quality_and_cause_is_one_kind_of_second(
    quality: Quality, cause: Cause | None, category: Coverage
) -> None:
    """A faulty sensor is no lost signal, and neither is measured; a little clipping is."""
    tally = Tally(SITE)
    tally.feed(reading(quality, cause, span_s=2.5))
    assert tally.seconds(PointId("p-101", "de-h")) == {category: 2.5}


def test_every_cause_has_a_meaning_here() -> None:
    """A new cause without a place in the ledger would count as measured."""
    assert {cause for _, cause, _ in MEANINGS} == {None, *Cause}


def test_each_point_counts_one_measure_alone() -> None:
    """Velocity where it is measured, else acceleration; other measures of the same seconds are not counted twice."""
    tally = Tally(SITE)
    for point in ("de-h", "de-v", "nde-h"):
        for measure in Measure:
            tally.feed(reading(point=point, measure=measure))
    for point in ("de-h", "nde-h"):
        assert tally.seconds(PointId("p-101", point)) == {Coverage.MEASURED: 1.0}
    tally.feed(reading(point="de-v", measure=Measure.ACCELERATION_RMS))
    assert tally.seconds(PointId("p-101", "de-v")) == {Coverage.MEASURED: 2.0}


def test_a_point_without_readings_has_no_seconds() -> None:
    """Nothing was seen, and nothing is claimed; readings of points that are not there are passed over."""
    tally = Tally(SITE)
    tally.feed(reading(point="stranger"))
    assert tally.seconds(PointId("p-101", "de-h")) == {}


@given(st.lists(st.tuples(st.sampled_from(MEANINGS), st.integers(1, 64)), max_size=40))
def test_the_seconds_add_up(life: list[tuple[tuple[Quality, Cause | None, Coverage], int]]) -> None:
    """No second is lost and none counts twice, and the categories stand in their order of precedence."""
    tally = Tally(SITE)
    for (quality, cause, _), quarters in life:
        tally.feed(reading(quality, cause, span_s=quarters / 4))
    seconds = tally.seconds(PointId("p-101", "de-h"))
    assert sum(seconds.values()) == sum(quarters / 4 for _, quarters in life)
    assert list(seconds) == [category for category in Coverage if category in seconds]
    assert all(value > 0 for value in seconds.values())
