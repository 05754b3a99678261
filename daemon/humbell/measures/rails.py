"""Finds samples at a converter's rail: a known one, or one that the signal itself gives away."""

import math

import numpy as np
from numpy.typing import NDArray

from humbell.measures.framing import Signal

# Converters differ by a few counts in what they call full scale.
_RAIL = 0.9995
# The same extreme, so often and so much more often than others, is a rail. The others are the next value, which a
# signal that repeats itself repeats as well, ...
_HITS, _HITS_OVER_OTHERS = 3, 2
# ... and all values that come this near, in shares of the signal's span: the top of a wave is round.
_NEAR = 1e-3
# Where a converter's steps are so coarse that extremes repeat by chance, nothing is learnt: it must resolve the signal
# this finely.
_STEPS = 2000
# Values are compared on a grid of this share of the first frame's span: fine enough for the steps of 24 bits, too
# coarse for the last bits of computed values, which differ by chance.
_GRID = 2.0**-26

# So many pairs of neighbours of single hits are remembered; with fewer the verdict stands already.
_BESIDE = 64


class Rails:
    """
    Counts the clipped samples of each channel, frame after frame.

    Without a known full scale, a rail shows by isolated or chained samples of one same extreme value, while other
    values do not repeat and hardly any come near. A signal that repeats itself as a whole (a computed sine, a record
    played in a loop) is not taken for clipped: there single hits have the same neighbours. The first two hits pass
    unseen.

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
                span = float(highest[c]) - float(lowest[c])
                clipped[c] = upper.hits_in(samples[c], highest[c], span) + lower.hits_in(samples[c], -lowest[c], span)
        return clipped


class _Extreme:
    """The two outermost values of one side of one channel, how often each was seen, and how much came near them."""

    def __init__(self, sign: int) -> None:
        self._sign = sign
        self._seen: dict[float, int] = {}
        self._next = -np.inf
        self._near = 0
        self._grid = 0.0
        self._beside: set[tuple[float, float]] = set()
        self._smallest_step = 0.0

    def hits_in(self, samples: Signal, extreme: float, span: float) -> int:
        """
        Return how many samples are at the rail.

        Args:
            samples: (n,), one frame.

            extreme: their largest value times the sign.

            span: their largest value less their smallest, above 0.
        """
        self._grid = self._grid or math.ldexp(_GRID, math.frexp(span)[1])
        extreme = round(extreme / self._grid)
        outermost = max(self._seen, default=-np.inf)
        if extreme < self._next or (extreme <= outermost and self._learnt()):
            return 0
        value = np.round(samples.astype(np.float64) * (self._sign / self._grid))
        following = float(np.max(value, where=value < extreme, initial=-np.inf))
        here = np.flatnonzero(value == extreme)
        if extreme > outermost:
            self._beside.clear()
        hits = self._new_hits(value, here) if extreme >= outermost else here.size
        top, reach = max(extreme, outermost), _NEAR * span / self._grid
        if extreme > outermost:
            self._near = self._near + self._seen[outermost] if extreme - outermost < reach else 0
        self._near += int(np.count_nonzero((value >= top - reach) & (value < top)))
        for level, count in ((extreme, hits), (following, int(np.count_nonzero(value == following)))):
            self._seen[level] = self._seen.get(level, 0) + count
        self._seen = dict(sorted(self._seen.items(), reverse=True)[:2])
        self._next = min(self._seen)
        if extreme < top or not self._is_rail() or not self._is_fine(value):
            return 0
        return here.size

    def _new_hits(self, value: NDArray[np.float64], here: NDArray[np.intp]) -> int:
        """Return how many hits are not repetitions: single ones between two values that have not been seen there."""
        chained = np.isin(here - 1, here) | np.isin(here + 1, here)
        padded = np.concatenate([[np.inf], value, [np.inf]])
        count = int(np.count_nonzero(chained))
        for i in here[~chained].tolist():
            beside = (float(padded[i]), float(padded[i + 2]))
            if beside not in self._beside and len(self._beside) < _BESIDE:
                self._beside.add(beside)
                count += 1
        return count

    def _is_rail(self) -> bool:
        hits = self._seen[max(self._seen)]
        return hits >= _HITS and hits > _HITS_OVER_OTHERS * self._others()

    def _learnt(self) -> bool:
        return self._others() >= _HITS and not self._is_rail()

    def _others(self) -> int:
        return max(self._near, self._seen[self._next]) if len(self._seen) > 1 else self._near

    def _is_fine(self, value: NDArray[np.float64]) -> bool:
        if not self._smallest_step:
            steps = np.diff(np.unique(value))
            self._smallest_step = float(steps.min()) if steps.size else 0.0
        return float(np.ptp(value)) >= _STEPS * self._smallest_step
