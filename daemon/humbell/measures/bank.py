"""All measures of one source at one rate: streams in groups of one frame length, pieces one by one."""

from collections.abc import Iterator, Sequence

import numpy as np

from humbell.measures.base import PointPlan
from humbell.measures.group import FrameGroup
from humbell.measures.overall import values
from humbell.measures.piece import PERIODS, lowest_edge_hz, piece_peak, piece_rms
from humbell.measures.response import band_problem
from humbell.measures.sensor_check import SensorCheck
from humbell.measures.steps import StepSearch
from humbell.measures.verdicts import read, verdict
from humbell.model import GOOD, Block, Cause, ConfigError, Quality, Reading, Verdict


class Bank:
    """
    Measures the points of one source.

    Args:
        rate_hz: samples a second of the source.

        points: what to measure.

        full_scale: largest magnitude of a sample in its own unit; None where unknown.

    Raises:
        ConfigError: *rate_hz* cannot carry a band.
    """

    def __init__(self, rate_hz: float, points: Sequence[PointPlan], full_scale: float | None) -> None:
        problems = [problem for point in points for problem in _out_of_band(point, rate_hz)]
        if problems:
            raise ConfigError(*problems)
        self._rate_hz = rate_hz
        self._points = points
        lengths = sorted({plan.frame_s for point in points for plan in point.bands})
        lower_hz = min((plan.band.lower_hz for point in points for plan in point.bands), default=1.0)
        ahead_s = StepSearch.ahead_s(lower_hz)
        self._groups = [
            FrameGroup(rate_hz, frame_s, ahead_s, _with_frame(points, frame_s), full_scale) for frame_s in lengths
        ]
        self._gain = np.array([point.gain for point in points])
        rail = np.nan if full_scale is None else full_scale
        self._check = SensorCheck(rate_hz, np.full(len(points), rail))

    def feed(self, block: Block) -> list[Reading]:
        """Return the readings that *block*, which follows on the one before it, makes possible."""
        if block.piece:
            return list(self._measure_piece(block))
        return _by_time(r for group in self._groups for r in group.feed(block.samples, block.start_ns))

    def reset(self, missing_s: float, end_ns: int) -> list[Reading]:
        """
        End the stream here: what comes next does not follow on it.

        Args:
            missing_s: seconds that were lost before the next stream.

            end_ns: UTC of the end of what was lost, ns since 1970.
        """
        return _by_time(r for group in self._groups for r in group.end(missing_s, end_ns))

    def _measure_piece(self, block: Block) -> Iterator[Reading]:
        span_s = block.length / self._rate_hz
        rows = [point.channel for point in self._points]
        found = self._check.judge(block.samples[rows].astype(np.float64))
        samples = block.samples[rows] * self._gain[:, None]
        samples[found.dead] = 0
        for row, point in enumerate(self._points):
            judged = verdict(found, row, block.length, settling=False, step=0.0)
            for plan in point.bands:
                one = samples[row : row + 1]
                rms = piece_rms(one, self._rate_hz, plan.band)
                peak = piece_peak(one, self._rate_hz, plan.band)
                measured = values(plan.band, rms, peak)[:, 0]
                final = judged if judged != GOOD else _long_enough(span_s, plan.band.lower_hz)
                yield from read(
                    point, plan.band.quantity, measured, final, end_ns=block.end_ns, span_s=span_s, piece=True
                )


def _with_frame(points: Sequence[PointPlan], frame_s: float) -> list[PointPlan]:
    return [point for point in points if any(plan.frame_s == frame_s for plan in point.bands)]


def _out_of_band(point: PointPlan, rate_hz: float) -> Iterator[str]:
    for plan in point.bands:
        said = band_problem(plan.band, rate_hz)
        if said:
            yield f"machines.{point.id.machine}.points.{point.id.point}.{plan.band.quantity}.band_hz: {said}"


def _long_enough(span_s: float, lower_hz: float) -> Verdict:
    if span_s * lower_hz >= PERIODS * (1 - 1e-9):
        return GOOD
    carried = lowest_edge_hz(span_s)
    return Verdict(
        Quality.UNCERTAIN,
        Cause.SHORT_PIECE,
        f"{span_s:g} s carry a band from {carried:.4g} Hz, not from {lower_hz:g} Hz",
    )


def _by_time(readings: Iterator[Reading]) -> list[Reading]:
    return sorted(readings, key=lambda reading: reading.time_ns)
