"""A defect in a rolling bearing: impacts that ring a resonance, and grow."""

import math
from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from humbell_sim.parts.base import CHUNK, Chunk

# After so many time constants a ringing impact is below a millionth.
_RINGING = 14.0
# Slip: impacts come early or late by this share of their period, standard deviation (common practice: 1 to 2 %).
_SLIP = 0.01
_BATCH = 256  # slips drawn at once: a generator for each impact would cost more than its ringing


@dataclass(frozen=True, slots=True)
class BearingDefect:
    """
    Impacts at a defect frequency.

    Each rings as A exp(-t/tau) sin(2 pi f t), the impulse response of a damped resonance.

    Args:
        impacts_hz: impacts a second, such as the outer race's.

        resonance_hz: that they ring.

        tau_s: time constant of the ringing.

        start_s: when the defect begins.

        growth: by which the amplitude grows each second from then on, m/s²; it begins at 0.

        seed: of the slip; the same seed gives the same impacts.
    """

    impacts_hz: float
    resonance_hz: float
    tau_s: float
    start_s: float
    growth: float
    seed: tuple[int, ...]

    def apply(self, signal: NDArray[np.float64], chunk: Chunk) -> NDArray[np.float64]:
        """See `Part`."""
        cosine, sine = _ringing(self.resonance_hz, self.tau_s, chunk.rate_hz)
        early_s = (chunk.first - len(sine)) / chunk.rate_hz
        late_s = (chunk.first + CHUNK) / chunk.rate_hz
        # One impact more on both sides, for the slip; what lies outside adds nothing.
        begin = max(math.floor((early_s - self.start_s) * self.impacts_hz) - 1, 0)
        end = max(math.ceil((late_s - self.start_s) * self.impacts_hz) + 2, 0)
        if begin >= end:
            return signal
        at_s = self.impacts_s(begin, end)
        first = np.ceil(at_s * chunk.rate_hz)
        # An impact falls between two samples; sin(a + b) = sin a cos b + cos a sin b gives its ringing from the table.
        late = first / chunk.rate_hz - at_s
        amplitude = self.growth * (at_s - self.start_s) * np.exp(-late / self.tau_s)
        angle = 2 * np.pi * self.resonance_hz * late
        of_cosine, of_sine = amplitude * np.sin(angle), amplitude * np.cos(angle)
        total = signal.copy()
        for offset, c, s in zip((first - chunk.first).astype(np.int64).tolist(), of_cosine, of_sine, strict=True):
            start, stop = max(offset, 0), min(offset + len(sine), CHUNK)
            if start < stop:
                part = slice(start - offset, stop - offset)
                total[start:stop] += c * cosine[part] + s * sine[part]
        return total

    def impacts_s(self, begin: int, end: int) -> NDArray[np.float64]:
        """Return the moments of the impacts *begin* to *end* - 1, s from the start."""
        batches = range(begin // _BATCH, (end - 1) // _BATCH + 1)
        slips = np.concatenate([_slips(self.seed, batch) for batch in batches])
        numbers = np.arange(begin, end)
        moments: NDArray[np.float64] = (numbers + slips[numbers - batches.start * _BATCH]) / self.impacts_hz
        return self.start_s + moments


@lru_cache(maxsize=256)
def _slips(seed: tuple[int, ...], batch: int) -> NDArray[np.float64]:
    """Return by how much of a period the impacts of one batch are late, (_BATCH,)."""
    return _SLIP * np.random.default_rng((*seed, batch)).standard_normal(_BATCH)


@lru_cache(maxsize=64)
def _ringing(resonance_hz: float, tau_s: float, rate_hz: float) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Return exp(-t/tau) cos(2 pi f t) and exp(-t/tau) sin(2 pi f t) at the samples, until they have died away."""
    time_s = np.arange(math.ceil(_RINGING * tau_s * rate_hz)) / rate_hz
    decay = np.exp(-time_s / tau_s)
    angle = 2 * np.pi * resonance_hz * time_s
    return decay * np.cos(angle), decay * np.sin(angle)
