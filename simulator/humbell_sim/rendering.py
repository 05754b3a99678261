"""Makes samples of parts: any span of them, the same to the last bit however it is cut."""

from collections.abc import Iterable

import numpy as np
from numpy.typing import NDArray

from humbell.model import STANDARD_GRAVITY
from humbell_sim.parts import CHUNK, Chunk, Part


class Renderer:
    """
    Makes the samples of all channels of one source.

    Args:
        channels: the parts of each channel, in the order in which they apply.

        rate_hz: samples a second and channel.
    """

    def __init__(self, channels: Iterable[Iterable[Part]], rate_hz: float) -> None:
        self._channels = tuple(tuple(parts) for parts in channels)
        self._rate_hz = rate_hz
        # Blocks seldom end where chunks do: the next one wants the rest of the same chunk.
        self._last: tuple[int, NDArray[np.float32]] | None = None

    def render(self, first: int, length: int) -> NDArray[np.float32]:
        """
        Return samples, (channels, length), g.

        Args:
            first: number of the first one, from 0.

            length: how many.
        """
        samples = np.empty((len(self._channels), length), np.float32)
        for number in range(first // CHUNK, -(-(first + length) // CHUNK)):
            start = number * CHUNK
            begin, end = max(start, first), min(start + CHUNK, first + length)
            samples[:, begin - first : end - first] = self._chunk(number)[:, begin - start : end - start]
        return samples

    def _chunk(self, number: int) -> NDArray[np.float32]:
        if self._last is not None and self._last[0] == number:
            return self._last[1]
        chunk = Chunk(number, self._rate_hz)
        samples = np.empty((len(self._channels), CHUNK), np.float32)
        for row, parts in zip(samples, self._channels, strict=True):
            signal = np.zeros(CHUNK)
            for part in parts:
                signal = part.apply(signal, chunk)
            row[:] = signal / STANDARD_GRAVITY
        self._last = number, samples
        return samples
