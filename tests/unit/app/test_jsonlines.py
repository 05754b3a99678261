"""JSON lines: the form that programs rely on, letter by letter. The form is that of the design's section 6."""

import json
import math
from datetime import UTC, datetime

import pytest
from hypothesis import given
from hypothesis import strategies as st

from humbell.app.jsonlines import coverage_line, reading_line, transition_line, utc_text
from humbell.model import (
    AlarmId,
    AlarmType,
    Cause,
    Coverage,
    LifeCycle,
    Measure,
    PointId,
    Quality,
    Reading,
    Transition,
)

START_NS = 1_772_359_201_000_000_000  # 2026-03-01T10:00:01Z
ALARM = AlarmId("p-101", "de-h", Measure.VELOCITY_RMS, AlarmType.HIGH)


def reading(value: float, cause: Cause | None = None, detail: str | None = None) -> Reading:
    """Return a velocity of one second, bad where there is a cause."""
    quality = Quality.GOOD if cause is None else Quality.BAD
    return Reading(START_NS, "p-101", "de-h", Measure.VELOCITY_RMS, value, 1.0, quality, cause, detail)


def test_a_reading_has_the_keys_of_the_design_in_its_order() -> None:
    """And one more, `detail`: numbers that belong to the cause."""
    assert reading_line(reading(2.31)) == (
        '{"kind":"reading","time":"2026-03-01T10:00:01Z","machine":"p-101","point":"de-h","measure":"velocity_rms",'
        '"value":2.31,"unit":"mm/s","span_s":1.0,"quality":"good","cause":null,"detail":null}'
    )
    assert reading_line(reading(math.nan, Cause.CLIPPED, "3 of 2560 samples")).endswith(
        '"value":null,"unit":"mm/s","span_s":1.0,"quality":"bad","cause":"clipped","detail":"3 of 2560 samples"}'
    )


def test_a_transition_has_the_keys_of_the_design_in_its_order() -> None:
    """And one more, `verified`: whether good values stand behind it."""
    told = Transition(
        START_NS,
        ALARM,
        LifeCycle.NORMAL,
        LifeCycle.UNACKNOWLEDGED,
        verified=True,
        value=4.61,
        limit=4.5,
        occurrence="7f0c",
    )
    assert transition_line(told) == (
        '{"kind":"transition","time":"2026-03-01T10:00:01Z","machine":"p-101","point":"de-h",'
        '"alarm":"velocity_rms.high","from":"normal","to":"unacknowledged","verified":true,"value":4.61,"limit":4.5,'
        '"occurrence":"7f0c"}'
    )
    lost = Transition(
        START_NS, ALARM, LifeCycle.NORMAL, LifeCycle.NORMAL, verified=False, value=math.nan, limit=4.5, occurrence=None
    )
    assert transition_line(lost).endswith(
        '"from":"normal","to":"normal","verified":false,"value":null,"limit":4.5,"occurrence":null}'
    )


def test_coverage_has_the_keys_of_the_design_in_its_order() -> None:
    """Seconds by category, in the order in which they are given."""
    seconds = {Coverage.SETTLING: 2.0, Coverage.MEASURED: 58.0}
    assert coverage_line(PointId("p-101", "de-h"), seconds) == (
        '{"kind":"coverage","machine":"p-101","point":"de-h","seconds":{"settling":2.0,"measured":58.0}}'
    )


@pytest.mark.parametrize(
    ("value", "text"),
    [
        (0.1 + 0.2, "0.3"),
        (2.3149999, "2.315"),
        (1234567.0, "1234570.0"),
        (0.0, "0.0"),
        (1e-9, "1e-09"),
        (math.nan, "null"),
        (math.inf, "null"),
        (-math.inf, "null"),
    ],
)
def test_values_have_six_digits_and_are_always_json(value: float, text: str) -> None:
    """More digits than a sensor gives are noise of the processor; what is no number is null, for JSON has no NaN."""
    assert f'"value":{text},' in reading_line(reading(value))


@pytest.mark.parametrize(
    ("time_ns", "text"),
    [
        (0, "1970-01-01T00:00:00Z"),
        (START_NS, "2026-03-01T10:00:01Z"),
        (START_NS + 500_000_000, "2026-03-01T10:00:01.5Z"),
        (START_NS + 1_000, "2026-03-01T10:00:01.000001Z"),
        (START_NS + 499, "2026-03-01T10:00:01Z"),
        (START_NS + 999_999_999, "2026-03-01T10:00:02Z"),
        (START_NS - 1, "2026-03-01T10:00:01Z"),
        (1_709_164_800_000_000_000, "2024-02-29T00:00:00Z"),
        (7_258_118_399_999_999_000, "2199-12-31T23:59:59.999999Z"),
    ],
)
def test_times_are_utc_with_no_more_digits_than_they_need(time_ns: int, text: str) -> None:
    """ISO 8601 with a Z, rounded to microseconds, carries included."""
    assert utc_text(time_ns) == text


@given(st.integers(0, 7_258_118_399_000_000))
def test_a_time_can_be_read_back(micros: int) -> None:
    """What is printed stands for the same microsecond, by the standard library's own reader."""
    read = datetime.fromisoformat(utc_text(micros * 1000))
    assert read.tzinfo == UTC
    assert round((read - datetime(1970, 1, 1, tzinfo=UTC)).total_seconds() * 1_000_000) == micros


def test_a_line_is_a_line() -> None:
    """Whatever a detail says, a reading stays one line, and comes back as it was."""
    line = reading_line(reading(1.0, Cause.FLAT, 'two\nlines, "quotes" and µ'))
    assert "\n" not in line
    assert json.loads(line)["detail"] == 'two\nlines, "quotes" and µ'
