"""The overalls of one band over whole frames: RMS, and for acceleration peak and crest factor."""

import numpy as np
from numpy.typing import NDArray

from humbell.measures.bandpass import Bandpass
from humbell.measures.fitting import fit
from humbell.measures.framing import Signal
from humbell.measures.response import Band, Quantity, settling_s, step_rms
from humbell.model import STANDARD_GRAVITY, Measure

# m/s or m/s² into the unit of the reading.
SCALE = {Quantity.VELOCITY: 1000.0, Quantity.ACCELERATION: 1 / STANDARD_GRAVITY}
# What is read off each band, its RMS first.
MEASURES = {
    Quantity.VELOCITY: (Measure.VELOCITY_RMS,),
    Quantity.ACCELERATION: (Measure.ACCELERATION_RMS, Measure.ACCELERATION_PEAK, Measure.CREST_FACTOR),
}
# What a step of the mean leaves in the band may be this share of the RMS. It adds in quadrature, 0.5 %, and by its part
# that is in phase with the vibration: 1.5 % in all for vibration from 16 Hz on in the band from 10 Hz, 3.5 % at 10 Hz.
_STEP_SHARE = 0.1


class Overall:
    """
    One band of some channels, frame after frame.

    Args:
        band: quantity and edges.

        rate_hz: samples a second.

        frame_s: seconds of signal in a frame.

        gain: (channels,) m/s² for one unit of a sample.
    """

    def __init__(self, band: Band, rate_hz: float, frame_s: float, gain: NDArray[np.float64]) -> None:
        self.band = band
        self._gain = np.abs(gain)
        self._frame_s = frame_s
        self._filter = Bandpass(fit(band, rate_hz), len(gain))
        self._settling_s = settling_s(band)
        self._step_rms = step_rms(band, frame_s)
        self._unsettled_s = np.zeros(len(gain))

    def restart(self, channels: NDArray[np.intp], first: NDArray[np.float64]) -> None:
        """Start some channels, (k,) indices, in the steady state of their first sample, (k,)."""
        self._filter.restart(channels, first)
        self._unsettled_s[channels] = self._settling_s

    def feed(self, samples: Signal) -> tuple[NDArray[np.float64], NDArray[np.bool_]]:
        """
        Return what the next frame (channels, n) measures, and whether it was settling still, (channels,).

        The first is (measures, channels), in the order and units of `MEASURES`.
        """
        settling = self._unsettled_s > 0
        self._unsettled_s = np.maximum(self._unsettled_s - self._frame_s, 0)
        output = self._filter.feed(samples)
        rms = np.sqrt(np.vecdot(output, output) / output.shape[1]) * self._gain
        # The velocity's peak is not asked for.
        peak = rms if self.band.quantity is Quantity.VELOCITY else _largest(output) * self._gain
        return values(self.band, rms, peak), settling

    def disturbed(
        self, rms: NDArray[np.float64], step: NDArray[np.float64], at_s: NDArray[np.float64]
    ) -> NDArray[np.float64]:
        """
        Return the steps of the mean that have moved the last frame's RMS, (channels,) m/s²; the band settles anew.

        Args:
            rms: (channels,) of that frame, in the unit of the reading.

            step: (channels,) heights of the steps, in units of a sample; 0 for none.

            at_s: (channels,) where in the frame they are.
        """
        height = step * self._gain
        moved = height * self._step_rms * SCALE[self.band.quantity] > _STEP_SHARE * rms
        left_s = np.where(moved, at_s + self._settling_s - self._frame_s, 0)
        self._unsettled_s = np.maximum(self._unsettled_s, left_s)
        return np.where(moved, height, 0)


def _largest(output: NDArray[np.float64]) -> NDArray[np.float64]:
    return np.asarray(np.maximum(output.max(axis=1), -output.min(axis=1)))


def values(band: Band, rms: NDArray[np.float64], peak: NDArray[np.float64]) -> NDArray[np.float64]:
    """
    Return the measures of a band, (measures, channels), in the order and units of `MEASURES`.

    The crest factor, peak over RMS, is NaN where there is no signal.

    Args:
        band: quantity and edges.

        rms: (channels,), m/s or m/s².

        peak: (channels,) largest magnitude, m/s or m/s².
    """
    if band.quantity is Quantity.VELOCITY:
        return rms[None] * SCALE[band.quantity]
    crest = np.divide(peak, rms, out=np.full_like(rms, np.nan), where=rms > 0)
    return np.stack([rms * SCALE[band.quantity], peak * SCALE[band.quantity], crest])
