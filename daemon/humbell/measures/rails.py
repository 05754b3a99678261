"""Finds samples at a converter's rail: a known one, or one that the signal itself gives away."""

import numpy as np
from numpy.typing import NDArray

from humbell.measures.framing import Signal

# Converters differ by a few counts in what they call full scale.
_RAIL = 0.9995
# The same extreme to the last bit, so often and so much more often than the value next to it, is a rail ...
_HITS, _HITS_OVER_NEXT = 3, 2
# ... unless the converter's steps are so coarse that extremes repeat by chance: it must resolve the signal this finely.
_STEPS = 2000


class Rails:
    """
    Counts the clipped samples of each channel, frame after frame.

    Without a known full scale, a rail shows by isolated or chained samples of one same extreme value, while no other
    value repeats. A signal that repeats itself as a whole (a computed sine, a record played in a loop) repeats its
    other values as well, and is not taken for clipped. The first two hits pass unseen.

    Args:
        full_scale: (channels,) magnitude of the rail in the unit of the samples; NaN where it is unknown.
    """

    def __init__(self, full_scale: NDArray[np.float64]) -> None:
        self._full_scale = full_scale * _RAIL
        self._learning = [(c, _Extreme(1), _Extreme(-1)) for c in np.flatnonzero(np.isnan(full_scale))]

    def count(
        self,
        samples: Signal,
        lowest: Signal,
        highest: Signal,
        alive: NDArray[np.bool_],
    ) -> NDArray[np.int_]:
        """
        Return how many samples of each channel are clipped, (channels,).

        Args:
            samples: (channels, n), one frame.

            lowest: (channels,) smallest sample of each channel.

            highest: (channels,) largest one.

            alive: (channels,) False for channels that are not to be looked at.
        """
        clipped = np.zeros(len(samples), dtype=np.int_)
        # A comparison with NaN is false: unknown rails are never reached here.
        for c in np.flatnonzero(alive & (np.maximum(highest, -lowest) >= self._full_scale)):
            clipped[c] = np.count_nonzero(np.abs(samples[c]) >= self._full_scale[c])
        for c, upper, lower in self._learning:
            if alive[c]:
                clipped[c] = upper.hits_in(samples[c], highest[c]) + lower.hits_in(samples[c], -lowest[c])
        return clipped


class _Extreme:
    """The two outermost values of one side of one channel, and how often each was seen."""

    def __init__(self, sign: int) -> None:
        self._sign = sign
        self._seen: dict[float, int] = {}
        self._next = -np.inf
        self._smallest_step = 0.0

    def hits_in(self, samples: Signal, extreme: float) -> int:
        """Return how many of *samples* are at the rail; *extreme* is their largest value times the sign."""
        outermost = max(self._seen, default=-np.inf)
        if extreme < self._next or (extreme <= outermost and self._repeats()):
            return 0
        value = self._sign * samples
        following = float(np.max(value, where=value < extreme, initial=-np.inf))
        here = int(np.count_nonzero(value == extreme))
        for level, count in ((extreme, here), (following, int(np.count_nonzero(value == following)))):
            self._seen[level] = self._seen.get(level, 0) + count
        self._seen = dict(sorted(self._seen.items(), reverse=True)[:2])
        self._next = min(self._seen)
        if extreme < max(self._seen) or not self._is_rail() or not self._is_fine(samples):
            return 0
        return here

    def _is_rail(self) -> bool:
        hits, following = self._seen[max(self._seen)], self._seen[self._next]
        return hits >= _HITS and hits > _HITS_OVER_NEXT * following

    def _repeats(self) -> bool:
        return len(self._seen) > 1 and self._seen[self._next] >= _HITS and not self._is_rail()

    def _is_fine(self, samples: Signal) -> bool:
        if not self._smallest_step:
            self._smallest_step = float(np.diff(np.unique(samples)).min())
        return float(np.ptp(samples)) >= _STEPS * self._smallest_step
