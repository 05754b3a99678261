"""Readings between two commits as one compact blob for each measure of each point, and back."""

import math
import zlib
from collections.abc import Iterable
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from humbell.model import Cause, Measure, PointId, Quality, Reading

# Values are stored as multiples of this factor above the smallest one: 0.1 % steps, so 0.05 % resolution, in 16 bits.
_STEP = math.log(1.001)
_SMALLEST = 1e-6  # in any unit: far below what a sensor tells from nothing
_NOTHING, _ZERO = 0, 1  # codes for "no value" and for less than the smallest
_LARGEST = 2**16 - 1

QUALITIES = tuple(Quality)
# Part of the stored form: new causes go to the end.
_CAUSES = (
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
)
_PIECE = 128

# Part of the stored form.
SERIES = 4096

_VERSION = 1
# Times and spans in microseconds, values, qualities and causes; times and spans as differences, which compress well.
_COLUMNS = ("<i8", "<i8", "<u2", "u1", "u1")
_ROW_BYTES = sum(np.dtype(kind).itemsize for kind in _COLUMNS)


@dataclass(frozen=True, slots=True)
class Chunk:
    """
    Readings of one measure of one point between two commits.

    Args:
        point: whose.

        measure: which.

        start_ns: UTC of the begin of the first reading's span, ns since 1970.

        end_ns: UTC of the end of the last one.

        good_s: seconds of signal with good quality.

        mean_square: of the good values, weighted by their seconds; None where there are none.

        maximum: of all values that are shown; None where there are none.

        worst: quality.

        readings: the values, `unpack` reads them; None where only the summary is kept.
    """

    point: PointId
    measure: Measure
    start_ns: int
    end_ns: int
    good_s: float
    mean_square: float | None
    maximum: float | None
    worst: Quality
    readings: bytes | None


def chunk_id(seq: int, series: int) -> int:
    """
    Return the row number of a chunk: all of one commit together, in the order of commits.

    Raises:
        ValueError: a journal holds at most 4096 series, 64 channels of 16 sources with four measures each.
    """
    if series >= SERIES:
        raise ValueError(f"series {series} is one too many (split the machines over two nodes)")
    return seq * SERIES + series


def pack(readings: Iterable[Reading], *, keep_values: bool) -> Chunk:
    """
    Return one chunk of the *readings* of one measure of one point, in order of time; there is at least one.

    Details of causes are not kept.
    """
    all_ = list(readings)
    first, last = all_[0], all_[-1]
    good = [r for r in all_ if r.quality is Quality.GOOD]
    good_s = math.fsum(r.span_s for r in good)
    shown = [r.value for r in all_ if math.isfinite(r.value)]
    return Chunk(
        point=PointId(first.machine, first.point),
        measure=first.measure,
        start_ns=first.time_ns - round(first.span_s * 1e9),
        end_ns=last.time_ns,
        good_s=good_s,
        # Neither ** nor fsum: both raise where a hostile value overflows, and one such value would stop the journal.
        mean_square=sum(r.span_s * r.value * r.value for r in good) / good_s if good_s else None,
        maximum=max(shown, default=None),
        worst=max((r.quality for r in all_), key=QUALITIES.index),
        readings=_encode(all_) if keep_values else None,
    )


def unpack(chunk: Chunk) -> list[Reading]:
    """
    Return the readings of *chunk*, without details; values within 0.05 %, times and spans within a microsecond.

    Raises:
        ValueError: the blob is damaged, or of a later version.
    """
    if chunk.readings is None:
        return []
    ends_us, spans_us, codes, marks, causes = _decode(chunk.readings)
    values = np.where(codes > _ZERO, _SMALLEST * np.exp((codes.astype(float) - 2) * _STEP), 0.0)
    values[codes == _NOTHING] = np.nan
    return [
        Reading(
            time_ns=chunk.start_ns + end_us * 1000,
            machine=chunk.point.machine,
            point=chunk.point.point,
            measure=chunk.measure,
            value=value,
            span_s=span_us / 1e6,
            quality=QUALITIES[mark & ~_PIECE],
            cause=_CAUSES[cause],
            piece=bool(mark & _PIECE),
        )
        for end_us, span_us, value, mark, cause in zip(
            ends_us.tolist(), spans_us.tolist(), values.tolist(), marks.tolist(), causes.tolist(), strict=True
        )
    ]


def _encode(readings: list[Reading]) -> bytes:
    start_ns = readings[0].time_ns - round(readings[0].span_s * 1e9)
    values = np.array([r.value for r in readings])
    shown = np.isfinite(values)
    codes = np.full(len(values), _NOTHING, dtype=np.int64)
    steps = np.round(np.log(np.maximum(values[shown], _SMALLEST / 2) / _SMALLEST) / _STEP) + 2
    codes[shown] = np.clip(steps, _ZERO, _LARGEST)
    marks = [QUALITIES.index(r.quality) | (_PIECE if r.piece else 0) for r in readings]
    columns = (
        _differences([round((r.time_ns - start_ns) / 1000) for r in readings], "<i8"),
        _differences([round(r.span_s * 1e6) for r in readings], "<i8"),
        codes.astype("<u2"),
        np.array(marks, dtype=np.uint8),
        np.array([_CAUSES.index(r.cause) for r in readings], dtype=np.uint8),
    )
    return bytes([_VERSION]) + zlib.compress(b"".join(_shuffle(column) for column in columns), 9)


def _decode(blob: bytes) -> tuple[NDArray[Any], ...]:
    if blob[:1] != bytes([_VERSION]):
        raise ValueError(f"readings of version {blob[:1].hex() or 'none'} are not known (update Humbell)")
    try:
        body = zlib.decompress(blob[1:])
    except zlib.error as error:
        raise ValueError(f"readings are damaged: {error}") from None
    count, rest = divmod(len(body), _ROW_BYTES)
    if rest:
        raise ValueError(f"readings are damaged: {len(body)} bytes are no whole rows of {_ROW_BYTES}")
    columns, at = [], 0
    for kind in _COLUMNS:
        size = np.dtype(kind).itemsize
        stored = np.frombuffer(body[at : at + count * size], np.uint8)
        columns.append(np.ascontiguousarray(stored.reshape(size, count).T).view(kind).ravel())
        at += count * size
    ends_us, spans_us, codes, marks, causes = columns
    if np.any(marks & ~np.uint8(_PIECE) >= len(QUALITIES)) or np.any(causes >= len(_CAUSES)):
        raise ValueError("readings hold qualities or causes that are not known (update Humbell)")
    return np.cumsum(ends_us), np.cumsum(spans_us), codes, marks, causes


def _shuffle(column: NDArray[Any]) -> bytes:
    """Return all first bytes, then all second ones, and so on: the high ones are alike and compress to nothing."""
    return np.ascontiguousarray(column.view(np.uint8).reshape(len(column), -1).T).tobytes()


def _differences(values: ArrayLike, kind: str) -> NDArray[Any]:
    return np.diff(np.asarray(values, dtype=np.int64), prepend=0).astype(kind)
