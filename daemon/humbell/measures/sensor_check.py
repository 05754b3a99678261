"""Looks at raw signal for what makes it untrustworthy: lost values, a dead sensor, clipping."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from humbell.measures.framing import Signal
from humbell.measures.rails import Rails

# No working sensor and converter give the same number so long; 128 samples keep a coarse slow converter out of it.
_FLAT_S, _FLAT_SAMPLES = 0.1, 128

# No sensor and converter come near it in any unit, and squares of more overflow float32: a filter would never recover.
_SANE = 1e15


@dataclass(frozen=True, slots=True, eq=False)
class Findings:
    """
    What the check found in one frame, one value a channel.

    Args:
        non_finite: there are values that are no numbers, or larger than any sensor gives.

        flat: the signal stood still for a tenth of a second or more.

        clipped: samples at the converter's rail.
    """

    non_finite: NDArray[np.bool_]
    flat: NDArray[np.bool_]
    clipped: NDArray[np.int_]

    @property
    def dead(self) -> NDArray[np.bool_]:
        """Channels whose frame holds nothing to filter."""
        return np.asarray(self.non_finite | self.flat)


class SensorCheck:
    """
    Judges frame after frame, or piece after piece; all that it remembers is what it learnt about the rails.

    Args:
        rate_hz: samples a second.

        full_scale: (channels,) magnitude of the rail, in units of a sample; NaN where it is unknown.
    """

    def __init__(self, rate_hz: float, full_scale: NDArray[np.float64]) -> None:
        self._rails = Rails(full_scale)
        self._flat_samples = max(round(_FLAT_S * rate_hz), _FLAT_SAMPLES)

    def judge(self, samples: Signal) -> Findings:
        """Return what is wrong with each channel of *samples* (channels, n)."""
        # Wherever so many equal samples begin, one whole window of half their number lies among them.
        window, length = self._flat_samples // 2, samples.shape[1]
        starts = np.arange(0, length, window)
        highest = np.maximum.reduceat(samples, starts, axis=1)
        lowest = np.minimum.reduceat(samples, starts, axis=1)
        # What is no number compares as false.
        non_finite = np.asarray(~((highest < _SANE) & (lowest > -_SANE)).all(axis=1))
        still = (highest == lowest)[:, : max(length // window, 1)].any(axis=1) & ~non_finite
        flat = np.zeros(len(samples), dtype=bool)
        for c in np.flatnonzero(still):
            flat[c] = _longest_run(samples[c]) >= min(self._flat_samples, length)
        alive = ~(non_finite | flat)
        clipped = self._rails.count(samples, lowest.min(axis=1), highest.max(axis=1), alive)
        return Findings(non_finite, flat, clipped)


def _longest_run(samples: Signal) -> int:
    changes = np.flatnonzero(np.diff(samples)) + 1
    return int(np.diff(np.concatenate([[0], changes, [samples.size]])).max())
