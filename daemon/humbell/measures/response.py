"""The analogue responses that both overalls aim at. Nothing here is sampled."""

import math
from dataclasses import dataclass
from enum import StrEnum

import numpy as np
from numpy.typing import NDArray

# A sampled band needs this many samples in each period of its upper edge: the figure of analysers (common practice).
SAMPLES_PER_PERIOD = 2.56

# Cut-offs of the velocity chain lie this factor (a tenth of a decade) outside the nominal edges.
_VELOCITY_WIDENING = 10.0**0.1


class Quantity(StrEnum):
    """What a band-passed acceleration is turned into."""

    VELOCITY = "velocity"
    ACCELERATION = "acceleration"


@dataclass(frozen=True, slots=True)
class Band:
    """
    A quantity in a frequency band.

    Args:
        quantity: velocity or acceleration.

        lower_hz: nominal lower edge.

        upper_hz: nominal upper edge.
    """

    quantity: Quantity
    lower_hz: float
    upper_hz: float

    @property
    def cutoffs_hz(self) -> tuple[float, float]:
        """The -3 dB frequencies of the two third-order Butterworth flanks."""
        if self.quantity is Quantity.VELOCITY:
            return self.lower_hz / _VELOCITY_WIDENING, self.upper_hz * _VELOCITY_WIDENING
        return self.lower_hz, self.upper_hz


def highest_edge_hz(rate_hz: float) -> float:
    """Return the highest upper band edge that *rate_hz* can carry."""
    return rate_hz / SAMPLES_PER_PERIOD


def band_problem(band: Band, rate_hz: float) -> str | None:
    """Return why *rate_hz* cannot carry *band*, with the highest possible edge and what to do; None where it can."""
    if band.upper_hz <= highest_edge_hz(rate_hz) * (1 + 1e-9):
        return None
    edge = math.floor(highest_edge_hz(rate_hz) * 10) / 10
    advice = (
        f"leave the band out by {band.quantity}: off, or sample at {SAMPLES_PER_PERIOD * band.upper_hz:g} Hz or more"
    )
    if edge >= 2 * band.lower_hz:
        advice = f"give band_hz: [{band.lower_hz:g}, {edge:g}], or {advice}"
    return f"{rate_hz:g} Hz carries a band up to {edge:g} Hz, not to {band.upper_hz:g} Hz ({advice})"


def flank_poles(cutoff_hz: float) -> NDArray[np.complex128]:
    """
    Return the three poles (rad/s) of a third-order Butterworth flank.

    -w and w exp(+-2 pi j / 3) with w = 2 pi *cutoff_hz*; S. Butterworth, Experimental Wireless 7 (1930) 536. The same
    poles serve a low-pass (no zero) and a high-pass (three zeros at 0).
    """
    angles = np.pi * np.array([1.0, 2.0 / 3.0, -2.0 / 3.0])
    return np.asarray(2 * np.pi * cutoff_hz * np.exp(1j * angles), dtype=np.complex128)


def analogue(band: Band, frequency_hz: NDArray[np.float64]) -> NDArray[np.complex128]:
    """
    Return the target response from acceleration in m/s² to m/s (velocity) or m/s² (acceleration).

    High-pass s³/((s+w1)(s²+w1 s+w1²)) and low-pass w2³/((s+w2)(s²+w2 s+w2²)), both third-order Butterworth; for
    velocity times the integrator 1/s, which one zero of the high-pass cancels: H(0) is 0. With the widened cut-offs the
    gain stays in the tolerance of ISO 2954:2012 in 10-1000 Hz; the standard's text is not to hand, its rows in the band
    are from a secondary source, those outside from memory. No conformity is claimed.

    Args:
        band: what is aimed at.

        frequency_hz: any shape.
    """
    s = np.asarray(2j * np.pi * frequency_hz, dtype=np.complex128)
    lower, upper = band.cutoffs_hz
    zeros = 2 if band.quantity is Quantity.VELOCITY else 3
    high_pass = s**zeros / _product(s, flank_poles(lower))
    return np.asarray(high_pass * (2 * np.pi * upper) ** 3 / _product(s, flank_poles(upper)))


def settling_s(band: Band) -> float:
    """
    Return after how long a disturbance of the filter's state has died away to a millionth.

    The slowest poles are the pair of the lower flank, whose real part is -w1/2.
    """
    slowest = np.pi * band.cutoffs_hz[0]
    return float(np.log(1e6) / slowest)


def step_rms(band: Band, span_s: float) -> float:
    """
    Return the RMS over *span_s* that a step of 1 m/s² leaves in the output, in m/s or m/s².

    By Parseval on the lower flank alone (the upper one takes next to nothing away): the energy of the step response is
    1/(6 w1³) for velocity and 1/(3 w1) for acceleration, from the integrals of x²/(1+x⁶) and x⁴/(1+x⁶) over the real
    line, pi/3 and 2 pi/3.
    """
    w1 = 2 * np.pi * band.cutoffs_hz[0]
    energy = 1 / (6 * w1**3) if band.quantity is Quantity.VELOCITY else 1 / (3 * w1)
    return float(np.sqrt(energy / span_s))


def _product(s: NDArray[np.complex128], poles: NDArray[np.complex128]) -> NDArray[np.complex128]:
    return np.asarray(np.prod(s[..., None] - poles, axis=-1))
