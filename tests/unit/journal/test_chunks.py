"""Chunks: what is read back is what was packed, within the stated resolution, or nothing."""

import importlib
import itertools
import math
import zlib
from dataclasses import replace
from typing import Any

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from humbell.journal import Chunk, pack, unpack
from humbell.journal.chunks import SERIES, chunk_id
from humbell.model import Cause, Measure, Quality, Reading
from unit.journal.given import DE, SECOND_NS, START_NS, lost, reading

# The package exports a function of the same name.
MODULE = importlib.import_module("humbell.journal.chunks")
SMALLEST, LARGEST = 1e-6, 2.79e22

# A reading with each cause, as the first version wrote them: what is stored may never be read as something else.
STORED = bytes.fromhex(
    "0178da73488001a7c730c02f06030c2403870930e0740106f899618074f3a64e6580424b4b0618646402c3"
    "2646208b9985958d9d83130084591f4d"
)
STORED_CAUSES = [
    None,
    Cause.NO_SAMPLES,
    Cause.INCOMPLETE,
    Cause.NON_FINITE,
    Cause.FLAT,
    Cause.CLIPPED,
    Cause.DC_STEP,
    Cause.SETTLING,
    Cause.SHORT_PIECE,
    Cause.DAEMON_DOWN,
]


def kept(*readings: Reading) -> list[Reading]:
    """Return *readings* as they are read back."""
    return unpack(pack(readings, keep_values=True))


def steady(count: int = 60) -> list[Reading]:
    """Return a minute of a machine that runs evenly."""
    values = 2.3 * (1 + 0.05 * np.random.default_rng(1).standard_normal(count))
    return [reading(second, float(value)) for second, value in enumerate(values, 1)]


@given(st.floats(SMALLEST, LARGEST))
def test_a_value_is_kept_within_half_a_per_mille(value: float) -> None:
    """From a millionth of a unit to more than any sensor can give."""
    (found,) = kept(reading(1, value))
    assert found.value == pytest.approx(value, rel=5e-4, abs=0)


@given(st.floats(0, SMALLEST, exclude_max=True))
def test_less_than_the_smallest_value_is_nothing_or_the_smallest(value: float) -> None:
    """No value grows by being stored, but by the rounding to the smallest one."""
    (found,) = kept(reading(1, value))
    assert found.value in {0.0, SMALLEST}
    assert value >= 0.999 * SMALLEST or found.value == 0


def test_zero_is_zero_and_no_value_is_none() -> None:
    """A dead sensor's zero and a missing value are two facts."""
    found = kept(reading(1, 0.0), reading(2, math.nan), reading(3, math.inf))
    assert found[0].value == 0
    assert math.isnan(found[1].value)
    assert math.isnan(found[2].value)


@given(st.floats(LARGEST, 1e300))
def test_a_huge_value_stays_a_huge_one(value: float) -> None:
    """What is beyond the largest code is told as the largest one, never as a small value."""
    (found,) = kept(reading(1, value))
    assert found.value == pytest.approx(LARGEST, rel=5e-3)


def test_a_value_whose_square_is_too_large_for_a_float_does_not_stop_the_journal() -> None:
    """A hostile block may bring it; the mean square is infinite then, and all else is kept."""
    chunk = pack([reading(1, 1e200), reading(2, 1e160), reading(3, 2.0)], keep_values=True)
    assert chunk.mean_square == math.inf
    assert unpack(chunk)[2].value == pytest.approx(2.0, rel=5e-4)


@given(st.lists(st.tuples(st.integers(1, 86_400 * SECOND_NS), st.integers(0, 400 * 86_400 * SECOND_NS)), min_size=1))
def test_times_and_spans_are_kept_within_a_microsecond(pieces: list[tuple[int, int]]) -> None:
    """However long each one is, and however long the pause before it: gaps are kept as they are."""
    given_, now_ns = [], START_NS
    for span_ns, pause_ns in pieces:
        now_ns += span_ns + pause_ns
        given_.append(replace(reading(0), time_ns=now_ns, span_s=span_ns / SECOND_NS))
    for before, after in zip(given_, kept(*given_), strict=True):
        assert abs(after.time_ns - before.time_ns) <= 1000
        assert abs(after.span_s - before.span_s) <= 1e-6


@pytest.mark.parametrize("piece", [False, True])
@pytest.mark.parametrize("quality", Quality)
@pytest.mark.parametrize("cause", [None, *Cause])
def test_every_quality_and_cause_is_kept(cause: Cause | None, quality: Quality, piece: bool) -> None:
    """A new cause needs a code of its own before anything can be stored with it."""
    given_ = reading(1, 2.5, quality=quality, cause=cause, piece=piece, measure=Measure.CREST_FACTOR, detail="flat")
    (found,) = kept(given_)
    assert found == replace(given_, value=found.value, detail=None)


def test_what_an_earlier_version_stored_is_read_as_it_was_meant() -> None:
    """Codes are never given a new meaning."""
    chunk = replace(pack([reading(1.5)], keep_values=True), readings=STORED)
    found = unpack(chunk)
    assert [one.cause for one in found] == STORED_CAUSES
    assert [(one.time_ns - START_NS) / SECOND_NS for one in found] == [1.5 * number for number in range(1, 11)]
    assert [one.span_s for one in found] == [1 + number / 4 for number in range(10)]
    assert [one.quality for one in found] == [Quality.GOOD, Quality.UNCERTAIN, *[Quality.BAD, Quality.UNCERTAIN] * 4]
    assert [one.piece for one in found] == [number == 8 for number in range(10)]
    assert [round(one.value, 3) for one in found[:2]] == [2.5, 2.5]


def test_the_summary_tells_of_the_good_seconds() -> None:
    """The mean square is of the good values by their seconds, the maximum of all that are shown."""
    chunk = pack(
        [
            reading(1, 3.0),
            reading(3, 6.0, span_s=2.0),
            reading(4, 9.0, quality=Quality.UNCERTAIN, cause=Cause.CLIPPED),
            lost(10, 6.0),
        ],
        keep_values=True,
    )
    assert (chunk.point, chunk.measure, chunk.worst) == (DE, Measure.VELOCITY_RMS, Quality.BAD)
    assert (chunk.start_ns, chunk.end_ns) == (START_NS, START_NS + 10 * SECOND_NS)
    assert (chunk.good_s, chunk.maximum) == (3.0, 9.0)
    assert chunk.mean_square == pytest.approx(np.average([9.0, 36.0], weights=[1, 2]))


def test_without_a_good_value_there_is_no_mean() -> None:
    """Nothing is no zero: a minute without signal has neither mean nor maximum."""
    chunk = pack([lost(1), lost(2)], keep_values=True)
    assert (chunk.good_s, chunk.mean_square, chunk.maximum, chunk.worst) == (0.0, None, None, Quality.BAD)


def test_a_summary_alone_has_no_values() -> None:
    """Where values are not kept, or were shed, none are made up."""
    chunk = pack(steady(), keep_values=False)
    assert chunk.readings is None
    assert unpack(chunk) == []
    assert chunk.good_s == 60


def test_a_minute_of_a_steady_machine_takes_less_than_three_bytes_a_value() -> None:
    """Bytes are wear: times and qualities that repeat cost next to nothing."""
    blob = pack(steady(), keep_values=True).readings
    assert blob is not None
    assert len(blob) < 3 * 60


def damaged(blob: bytes) -> Chunk:
    """Return a chunk whose values were replaced by *blob*."""
    return replace(pack(steady(), keep_values=True), readings=blob)


@given(st.data())
def test_a_damaged_blob_is_refused_or_harmless(data: st.DataObject) -> None:
    """A changed byte never gives another value: it is told, or it did not matter."""
    blob = bytearray(pack(steady(), keep_values=True).readings or b"")
    at = data.draw(st.integers(0, len(blob) - 1))
    blob[at] ^= data.draw(st.integers(1, 255))
    try:
        found = unpack(damaged(bytes(blob)))
    except ValueError:
        return
    assert found == kept(*steady())


@pytest.mark.parametrize("length", [0, 1, 2, 40, -1])
def test_a_blob_that_was_cut_is_refused(length: int) -> None:
    """Whole or not at all."""
    blob = pack(steady(), keep_values=True).readings or b""
    with pytest.raises(ValueError, match="readings"):
        unpack(damaged(blob[:length]))


def test_a_blob_that_is_no_whole_number_of_rows_is_refused() -> None:
    """Sound compression around the wrong content is damage, too."""
    with pytest.raises(ValueError, match="damaged"):
        unpack(damaged(STORED[:1] + zlib.compress(bytes(61))))


def test_a_blob_of_a_later_version_is_refused_with_what_to_do() -> None:
    """The first byte is the version."""
    with pytest.raises(ValueError, match="version 02 are not known \\(update Humbell\\)"):
        unpack(damaged(b"\x02" + STORED[1:]))


@pytest.mark.parametrize(("codes", "field"), [("_CAUSES", "cause"), ("QUALITIES", "quality")])
def test_a_code_of_a_later_version_is_refused_with_what_to_do(
    codes: str, field: str, monkeypatch: pytest.MonkeyPatch
) -> None:
    """A cause that this version does not know is not taken for another one."""
    later: Any = "later"
    with monkeypatch.context() as patch:
        patch.setattr(MODULE, codes, (*getattr(MODULE, codes), later))
        chunk = pack([replace(reading(1), **{field: later})], keep_values=True)
    with pytest.raises(ValueError, match="update Humbell"):
        unpack(chunk)


def test_row_numbers_follow_the_commits_and_end_where_series_do() -> None:
    """All of one commit together, in the order of commits, none twice; one series too many is told."""
    numbers = [chunk_id(seq, series) for seq, series in itertools.product(range(1, 4), [0, 1, SERIES - 1])]
    assert numbers == sorted(set(numbers))
    with pytest.raises(ValueError, match="split the machines over two nodes"):
        chunk_id(1, SERIES)
