"""One band of many channels, filtered as a stream: decimator and sections with their state."""

from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy import signal

from humbell.measures.fitting import Design
from humbell.measures.framing import Signal


class Bandpass:
    """
    Filters consecutive stretches of signal; cutting them otherwise changes nothing but the last bits.

    Args:
        design: the response.

        channels: number of channels.
    """

    def __init__(self, design: Design, channels: int) -> None:
        self._design = design
        self._steady = signal.sosfilt_zi(design.sos)
        self._state = np.zeros((len(design.sos), channels, 2))
        factor = design.factor
        # Row k weighs the samples of the group that came k groups after the output's oldest one.
        self._rows = np.ascontiguousarray(design.fir[::-1].reshape(-1, factor))
        self._tail: Signal = np.zeros((channels, design.fir.size - factor))
        self._pending: Signal = np.zeros((channels, 0))

    def restart(self, channels: NDArray[np.intp], first: NDArray[np.float64]) -> None:
        """
        Start some channels afresh, in the steady state of a constant input.

        Args:
            channels: (k,) indices.

            first: (k,) the constant, which is the first sample of what follows.
        """
        self._state[:, channels, :] = self._steady[:, None, :] * first[None, :, None]
        self._tail[channels] = first[:, None]
        self._pending[channels] = first[:, None]

    def feed(self, samples: Signal) -> NDArray[np.float64]:
        """
        Return the next outputs (channels, m) for the next inputs (channels, n).

        Without decimation m = n; else about n / factor, by count of all samples so far.
        """
        decimated = samples if self._design.factor == 1 else self._decimate(samples)
        if not decimated.size:  # fewer samples than one output needs; SciPy takes no empty arrays
            return np.zeros(decimated.shape)
        output, self._state = signal.sosfilt(self._design.sos, decimated, axis=-1, zi=self._state)
        return np.asarray(output)

    def _decimate(self, samples: Signal) -> Signal:
        # All groups of `factor` samples times all groups of the FIR is one matrix product; an output is the sum along a
        # diagonal of it. One channel at a time, so that all of it stays in the processor's cache, and in the type of
        # the samples: a FIR has no memory in which the rounding of float32 could grow.
        rows, factor = self._rows.shape
        weights = self._rows.astype(samples.dtype)
        parts: list[NDArray[Any]] = [self._tail, self._pending, samples]
        joined: NDArray[Any] = np.concatenate(parts, axis=1, dtype=samples.dtype)
        whole = joined.shape[1] // factor * factor
        self._pending = joined[:, whole:].copy()
        self._tail = joined[:, whole - self._tail.shape[1] : whole].copy()
        count = whole // factor - rows + 1
        outputs = np.empty((len(joined), count), samples.dtype)
        for i, channel in enumerate(joined):
            products = weights @ channel[:whole].reshape(-1, factor).T
            outputs[i] = products[0, :count]
            for k in range(1, rows):
                outputs[i] += products[k, k : k + count]
        return outputs
