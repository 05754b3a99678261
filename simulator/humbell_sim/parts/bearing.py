"""A defect in a rolling bearing: impacts that ring a resonance, and grow."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from humbell_sim.parts.base import Span

# After so many time constants a ringing impact is below a millionth.
_RINGING = 14.0
# Slip: impacts come early or late by this share of their period, standard deviation (common practice: 1 to 2 %).
_SLIP = 0.01


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

    def apply(self, signal: NDArray[np.float64], span: Span) -> NDArray[np.float64]:
        """See `Part`."""
        total = signal.copy()
        ring = int(np.ceil(_RINGING * self.tau_s * span.rate_hz))
        early_s = (span.first - ring) / span.rate_hz
        late_s = (span.first + span.length) / span.rate_hz
        begin = max(int((early_s - self.start_s) * self.impacts_hz) - 1, 0)
        end = max(int((late_s - self.start_s) * self.impacts_hz) + 2, 0)
        for k in range(begin, end):
            slip = _SLIP * np.random.default_rng((*self.seed, k)).standard_normal()
            at_s = self.start_s + (k + slip) / self.impacts_hz
            first = max(int(np.ceil(at_s * span.rate_hz)), span.first)
            last = min(int(np.ceil(at_s * span.rate_hz)) + ring, span.first + span.length)
            if first >= last:
                continue
            t = np.arange(first, last) / span.rate_hz - at_s
            amplitude = self.growth * (at_s - self.start_s)
            ringing = np.exp(-t / self.tau_s) * np.sin(2 * np.pi * self.resonance_hz * t)
            total[first - span.first : last - span.first] += amplitude * ringing
        return total
