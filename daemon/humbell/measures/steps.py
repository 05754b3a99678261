"""Looks for steps of the mean: a cable that moves, a thermal shock, a bias that recovers."""

import numpy as np
from numpy.typing import NDArray

from humbell.measures.framing import Frame, Signal

# Windows on each side of a possible step, their parts, and how many frames tell what is usual.
_PARTS = 20
_HISTORY = 10
# A sway below the band looks like steps up and down in each frame; a step stands out this far.
_OUTSTANDING = 4.0
# The smoothed difference shows a step at this share of its height.
_SHOWN = 0.75


class StepSearch:
    """
    Searches frame after frame of one stream.

    Args:
        rate_hz: samples a second.

        frame_s: seconds of signal in a frame.

        lower_hz: lowest edge of the bands that are measured; its period is the time scale of the search.

        channels: number of channels.
    """

    def __init__(self, rate_hz: float, frame_s: float, lower_hz: float, channels: int) -> None:
        # One part: 1/20 of the period, and never less than one sample of the shortest frame.
        self._parts = max(1, min(round(frame_s * lower_hz * _PARTS), int(frame_s * rate_hz)))
        self._part_s = frame_s / self._parts
        self._kernel = _step_kernel()
        self._before = np.full((channels, self._kernel.size // 2), np.nan)
        self._usual = np.full((_HISTORY, channels), np.nan)

    @staticmethod
    def ahead_s(lower_hz: float) -> float:
        """Return how much signal behind a frame the search looks at."""
        return 1.5 / lower_hz

    def restart(self) -> None:
        """Forget the signal before."""
        self._before[:] = np.nan
        self._usual[:] = np.nan

    def find(self, frame: Frame, alive: NDArray[np.bool_]) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """
        Return height (units of a sample; 0: none) and place (s from the frame's start) of the largest step.

        Args:
            frame: with what follows it.

            alive: (channels,) False for channels that are not to be looked at.
        """
        half = self._kernel.size // 2
        part = frame.samples.shape[1] / self._parts
        inside = _means(frame.samples, np.linspace(0, frame.samples.shape[1], self._parts + 1).round().astype(int))
        # Behind the frame as many parts as are whole there.
        count = min(half, int(frame.ahead.shape[1] / part))
        behind = _means(frame.ahead, (np.arange(count + 1) * part).round().astype(int))
        means = np.concatenate([self._before, inside, behind], axis=1)
        self._before = inside[:, -half:] if self._parts >= half else means[:, -half - count :][:, :half]
        self._before = np.where(alive[:, None], self._before, np.nan)

        differences = [np.convolve(row, self._kernel, "valid") for row in means]
        heights = np.abs(np.nan_to_num(differences))
        heights[~alive] = 0
        place = heights.argmax(axis=1)
        height = heights[np.arange(len(heights)), place]
        # The first frame has no history: there the rest of the frame, out of the step's sight, tells what is usual.
        near = np.abs(np.arange(heights.shape[1]) - place[:, None]) <= self._kernel.size
        usual = _median(self._usual, np.where(near, 0, heights).max(axis=1))
        self._usual = np.roll(self._usual, 1, axis=0)
        self._usual[0] = np.where(alive, height, np.nan)
        outstanding = np.where(height > _OUTSTANDING * usual, height / _SHOWN, 0)
        return outstanding, place * self._part_s


def _median(history: NDArray[np.float64], otherwise: NDArray[np.float64]) -> NDArray[np.float64]:
    """Return the lower median of what is known, column by column; *otherwise* where nothing is."""
    known = np.count_nonzero(~np.isnan(history), axis=0)
    ordered = np.sort(history, axis=0)  # unknown ones come last
    median = ordered[np.maximum(known - 1, 0) // 2, np.arange(len(known))]
    return np.where(known > 0, median, otherwise)


def _step_kernel() -> NDArray[np.float64]:
    """
    Return weights that turn means of short parts into the step between before and after, smoothed.

    The difference of the means of one period of the lower edge after and before, averaged over such a period: vibration
    of v m/s at a frequency f in the band leaves at most 4 sqrt(2) v f0 |sin³(x)/x| of it, with x = pi f/f0; far less
    than a step that matters.
    """
    box = np.full(_PARTS, 1 / _PARTS)
    return np.convolve(np.concatenate([-box, box]), box)


def _means(samples: Signal, edges: NDArray[np.int_]) -> NDArray[np.float64]:
    if edges.size <= 1:
        return np.zeros((len(samples), 0))
    with np.errstate(invalid="ignore", over="ignore"):  # infinities and no-numbers are found by the extremes
        sums = np.add.reduceat(samples[:, : edges[-1]], edges[:-1], axis=1)
    # The frame before an infinite sample sees it ahead, and must not take it for a step.
    return np.where(np.isfinite(sums), sums / np.diff(edges), np.nan)
