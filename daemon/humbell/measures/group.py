"""All points of one source whose frames have one length: framing, sensor check and bands, as arrays over channels."""

from collections.abc import Iterator, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from humbell.measures.base import PointPlan
from humbell.measures.framing import Frame, Framer
from humbell.measures.overall import MEASURES, Overall
from humbell.measures.response import Band
from humbell.measures.sensor_check import SensorCheck
from humbell.measures.steps import StepSearch
from humbell.measures.verdicts import CUT_SHORT, LOST, read, verdict
from humbell.model import Reading, Samples


@dataclass(frozen=True, slots=True, eq=False)
class _Chain:
    overall: Overall
    rows: NDArray[np.intp]  # which of the group's channels it measures


class FrameGroup:
    """
    Measures some points of one source in frames of one length.

    Args:
        rate_hz: samples a second.

        frame_s: seconds of signal in a frame.

        ahead_s: see `Framer`; the same for all groups of a source, so that their readings come in order of time.

        points: with at least one band of that frame length; other bands of theirs are left alone.

        full_scale: largest magnitude of a sample in its own unit; None where unknown.
    """

    def __init__(
        self,
        rate_hz: float,
        frame_s: float,
        ahead_s: float,
        points: Sequence[PointPlan],
        full_scale: float | None,
    ) -> None:
        self._frame_s = frame_s
        self._points = points
        bands: dict[Band, list[int]] = {}
        for row, point in enumerate(points):
            for plan in point.bands:
                if plan.frame_s == frame_s:
                    bands.setdefault(plan.band, []).append(row)
        lower_hz = min(band.lower_hz for band in bands)
        gain = np.array([point.gain for point in points])
        channels = np.array([point.channel for point in points], dtype=np.intp)
        rail = np.nan if full_scale is None else full_scale
        self._framer = Framer(rate_hz, frame_s, ahead_s, channels)
        self._check = SensorCheck(rate_hz, np.full(len(points), rail))
        self._steps = StepSearch(rate_hz, frame_s, lower_hz, len(points))
        self._chains = [
            _Chain(Overall(band, rate_hz, frame_s, gain[rows]), np.array(rows, dtype=np.intp))
            for band, rows in bands.items()
        ]
        # Channels whose filters begin with the next frame.
        self._fresh = np.ones(len(points), dtype=bool)

    def feed(self, samples: Samples, start_ns: int) -> list[Reading]:
        """
        Return the readings of all frames that are whole now.

        Args:
            samples: (channels of the source, n), following on those before.

            start_ns: UTC of the first one, ns since 1970.
        """
        return [reading for frame in self._framer.feed(samples, start_ns) for reading in self._measure(frame)]

    def end(self, missing_s: float, end_ns: int) -> list[Reading]:
        """
        Return the last readings of a stream that ends here, and "no samples" for what is lost behind them.

        Args:
            missing_s: seconds that were lost between this stream and the next one.

            end_ns: UTC of the end of what was lost, ns since 1970.
        """
        readings = [reading for frame in self._framer.flush() for reading in self._measure(frame)]
        lost_s = self._framer.held_s + missing_s
        if lost_s > 0:
            lost = LOST if missing_s > 0 else CUT_SHORT
            for chain in self._chains:
                quantity = chain.overall.band.quantity
                nothing = np.full(len(MEASURES[quantity]), np.nan)
                for row in chain.rows:
                    readings += read(self._points[row], quantity, nothing, lost, end_ns=end_ns, span_s=lost_s)
        self._framer.restart()
        self._steps.restart()
        self._fresh[:] = True
        return readings

    def _measure(self, frame: Frame) -> Iterator[Reading]:
        samples = frame.samples
        found = self._check.judge(samples)
        step, at_s = self._steps.find(frame, ~found.dead)
        # Nothing that is no number may enter a filter, and a dead channel's state must be zero, not a decaying rest:
        # numbers near the smallest make the processor many times slower.
        samples[found.dead] = 0
        restarting = self._fresh | found.dead
        self._fresh = found.dead
        for chain in self._chains:
            rows = chain.rows
            starting = np.flatnonzero(restarting[rows])
            chain.overall.restart(starting, samples[rows[starting], 0])
            measured, settling = chain.overall.feed(samples if len(rows) == len(samples) else samples[rows])
            moved = chain.overall.disturbed(measured[0], step[rows], at_s[rows])
            for i, row in enumerate(rows):
                judged = verdict(found, row, samples.shape[1], settling=bool(settling[i]), step=moved[i])
                quantity = chain.overall.band.quantity
                yield from read(
                    self._points[row], quantity, measured[:, i], judged, end_ns=frame.end_ns, span_s=self._frame_s
                )
