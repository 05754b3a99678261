"""Digital second-order sections that follow an analogue response in magnitude, at any rate that carries the band."""

from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray
from scipy import optimize, signal

from humbell.measures.response import Band, Quantity, analogue, band_problem, flank_poles

# The rate behind the decimator is at least this many times the upper edge. Less would save little and leave the
# decimator's own flank too close to the band.
_DECIMATED_RATE = 5.12
# What the decimator folds back into the band lies about this far below (dB); 85 at all rates.
_FOLDED_DB = 90.0
# Where the decimator passes less than this, it and not the sections set the response.
_DECIMATOR_FLOOR = 1e-3
# In the band the fit is held this much tighter than outside.
_OUTSIDE_WEIGHT = 0.02


@dataclass(frozen=True, slots=True, eq=False)
class Design:
    """
    A decimator and the sections behind it.

    Args:
        band: what is followed.

        rate_hz: samples a second that go in.

        factor: one sample in so many is kept; 1: no decimator.

        fir: (taps,) the decimator's impulse response, minimum phase, unit gain at 0 Hz.

        sos: (sections, 6) at *rate_hz* / *factor*, as SciPy writes them.
    """

    band: Band
    rate_hz: float
    factor: int
    fir: NDArray[np.float64]
    sos: NDArray[np.float64]

    @property
    def output_rate_hz(self) -> float:
        """Samples a second that come out."""
        return self.rate_hz / self.factor

    def magnitude(self, frequency_hz: NDArray[np.float64]) -> NDArray[np.float64]:
        """Return the gain for a sine of each frequency up to half of `rate_hz`, folded where decimation folds it."""
        passed = np.abs(signal.freqz(self.fir, worN=frequency_hz, fs=self.rate_hz)[1])
        folded = np.abs((frequency_hz + self.output_rate_hz / 2) % self.output_rate_hz - self.output_rate_hz / 2)
        shaped = np.abs(signal.freqz_sos(self.sos, worN=folded, fs=self.output_rate_hz)[1])
        return np.asarray(passed * shaped)


@lru_cache(maxsize=256)  # a node has a handful of bands and rates; 256 outlasts any fleet in one process
def fit(band: Band, rate_hz: float) -> Design:
    """
    Return the design for one band and rate; the same arguments give the same numbers.

    The poles are the analogue ones mapped by z = exp(s/rate), and the zeros at 0 Hz are kept at z = 1. The other zeros
    are fitted: the squared magnitude of a numerator is a polynomial in cos(w), linear in its coefficients, so the
    smallest largest relative error is a linear programme. Its positive solution is split into a minimum-phase numerator
    (Fejér-Riesz theorem). The decimator's droop is part of what is fitted.

    Raises:
        ValueError: *rate_hz* cannot carry the band.
    """
    said = band_problem(band, rate_hz)
    if said:
        raise ValueError(said)
    factor = max(1, int(rate_hz / (_DECIMATED_RATE * band.upper_hz)))
    fir = _decimator(factor, rate_hz, band.upper_hz)
    return Design(band, rate_hz, factor, fir, _sections(band, rate_hz / factor, fir, rate_hz))


def _decimator(factor: int, rate_hz: float, upper_hz: float) -> NDArray[np.float64]:
    if factor == 1:
        return np.ones(1)
    # The band ends at upper_hz; what lies within 1.3 times the edge of a multiple of the new rate would fold into it.
    stop_hz = rate_hz / factor - 1.3 * upper_hz
    taps, beta = signal.kaiserord(_FOLDED_DB, (stop_hz - upper_hz) / (rate_hz / 2))
    taps = -(-taps // factor) * factor
    fir = signal.firwin(taps, (stop_hz + upper_hz) / 2, window=("kaiser", beta), fs=rate_hz)
    # Minimum phase keeps the two overalls of one frame within a millisecond of each other. Its cepstrum folds over
    # where the transform is not many times longer than the filter.
    fir = signal.minimum_phase(fir, half=False, n_fft=max(1 << 14, 1 << (8 * taps).bit_length()))
    return np.asarray(fir / fir.sum())


def _sections(band: Band, rate_hz: float, fir: NDArray[np.float64], fir_rate_hz: float) -> NDArray[np.float64]:
    lower, upper = band.cutoffs_hz
    poles = np.exp(np.concatenate([flank_poles(lower), flank_poles(upper)]) / rate_hz)
    zeros_at_one = 2 if band.quantity is Quantity.VELOCITY else 3
    free = len(poles) - zeros_at_one

    frequency = np.union1d(np.geomspace(band.lower_hz / 4, rate_hz / 2, 100), np.linspace(0, rate_hz / 2, 401)[1:])
    w = 2 * np.pi * frequency / rate_hz
    back = np.exp(-1j * w)
    rest = np.abs((1 - back) ** zeros_at_one / np.prod(1 - poles[:, None] * back, axis=0))
    rest *= np.maximum(np.abs(signal.freqz(fir, worN=frequency, fs=fir_rate_hz)[1]), _DECIMATOR_FLOOR)
    wanted = (np.abs(analogue(band, frequency)) / rest) ** 2

    relative = np.cos(np.outer(w, np.arange(free + 1))) / wanted[:, None]
    coefficients = _smallest_largest_error(relative, (frequency >= band.lower_hz / 2) & (frequency <= band.upper_hz))
    zeros, gain = _minimum_phase(coefficients)
    return np.asarray(signal.zpk2sos(np.concatenate([zeros, np.ones(zeros_at_one)]), poles, gain))


def _smallest_largest_error(relative: NDArray[np.float64], inside: NDArray[np.bool_]) -> NDArray[np.float64]:
    """Return c that brings ``relative @ c`` closest to 1 everywhere, and keeps it positive."""
    rows, columns = relative.shape
    weight = np.where(inside, 1.0, _OUTSIDE_WEIGHT)
    weighted = relative * weight[:, None]
    slack = np.ones((rows, 1))
    result = optimize.linprog(
        np.append(np.zeros(columns), 1.0),
        A_ub=np.block([[weighted, -slack], [-weighted, -slack], [-relative, 0 * slack]]),
        b_ub=np.concatenate([weight, -weight, np.full(rows, -0.01)]),
        bounds=[(None, None)] * columns + [(0, None)],
        method="highs",
    )
    if not result.success or result.x is None:
        raise ArithmeticError(f"no response was found ({result.message})")
    return np.asarray(result.x[:columns])


def _minimum_phase(cosines: NDArray[np.float64]) -> tuple[NDArray[np.complex128], float]:
    """Return zeros inside the unit circle and the gain of B(z) with |B|² = sum of c[k] cos(k w)."""
    polynomial = np.concatenate([cosines[:0:-1] / 2, cosines[:1], cosines[1:] / 2])
    roots = np.roots(polynomial).astype(np.complex128)
    inside = roots[np.argsort(np.abs(roots))][: len(cosines) - 1]
    return inside, float(np.sqrt(cosines.sum()) / np.abs(np.prod(1 - inside)))
