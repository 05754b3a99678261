"""Measures a separate short record: a windowed spectrum times the same target response that streams are filtered by."""

import numpy as np
from numpy.typing import NDArray
from scipy import fft, signal

from humbell.measures.response import Band, analogue, settling_s

# A record shorter than this many periods of a band's lower edge tells little about that edge.
PERIODS = 10.0


def lowest_edge_hz(span_s: float) -> float:
    """Return the lower edge that a record of *span_s* can carry."""
    return PERIODS / span_s


def piece_rms(samples: NDArray[np.float64], rate_hz: float, band: Band) -> NDArray[np.float64]:
    """
    Return the RMS in the band, (channels,), m/s or m/s².

    Mean removed, Hann window, one-sided spectrum, times |H|²; divided by the window's mean square (Heinzel, Rüdiger,
    Schilling, "Spectrum and spectral density estimation by the DFT", 2002, eq. 22-24).

    Args:
        samples: (channels, n), m/s².

        rate_hz: samples a second.

        band: what is measured.
    """
    length = samples.shape[1]
    window = signal.windows.hann(length, sym=False)
    spectrum = fft.rfft((samples - samples.mean(axis=1, keepdims=True)) * window, axis=1)
    power = np.abs(spectrum * analogue(band, fft.rfftfreq(length, 1 / rate_hz))) ** 2
    power[:, 1 : (length + 1) // 2] *= 2
    return np.asarray(np.sqrt(power.sum(axis=1) / (length * np.sum(window**2))))


def piece_peak(samples: NDArray[np.float64], rate_hz: float, band: Band) -> NDArray[np.float64]:
    """
    Return the largest magnitude in the band, (channels,), m/s or m/s²; NaN where the record ends before it has settled.

    The waveform is filtered both ways at once by |H|, so that both ends are disturbed; they are left out.
    """
    length = samples.shape[1]
    padded = fft.next_fast_len(2 * length, real=True)
    spectrum = fft.rfft(samples - samples.mean(axis=1, keepdims=True), padded, axis=1)
    response = np.abs(analogue(band, fft.rfftfreq(padded, 1 / rate_hz)))
    waveform = fft.irfft(spectrum * response, padded, axis=1)[:, :length]
    edge = round(settling_s(band) * rate_hz)
    if length <= 2 * edge:
        return np.full(len(samples), np.nan)
    return np.asarray(np.abs(waveform[:, edge : length - edge]).max(axis=1))
