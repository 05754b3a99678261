"""Cuts a stream of blocks into frames by counting samples; how it was cut into blocks leaves no trace."""

from collections import deque
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from humbell.model import Samples

# Frames keep the source's resolution; filters compute in float64 whatever comes in.
Signal = NDArray[np.float32] | NDArray[np.float64]

# A sender's clock that wanders this far from the count of its samples is followed; less is jitter of its time stamps.
_FOLLOW_NS = 5_000_000


@dataclass(frozen=True, slots=True, eq=False)
class Frame:
    """
    A stretch of signal.

    Args:
        samples: (channels, n), in the unit and type of the source.

        ahead: (channels, k) what follows, k samples or fewer where the stream ends.

        end_ns: UTC of the moment behind the last sample, ns since 1970.
    """

    samples: Signal
    ahead: Signal
    end_ns: int


class Framer:
    """
    Cuts frames of *frame_s* from what it is fed.

    Frame k begins at sample round(k frame_s rate): a rate that is no whole number keeps the average right.

    Args:
        rate_hz: samples a second.

        frame_s: seconds of signal in a frame.

        ahead_s: a frame is given out when so much more has come in, and shows it.

        channels: which rows of the blocks to take.
    """

    def __init__(self, rate_hz: float, frame_s: float, ahead_s: float, channels: NDArray[np.intp]) -> None:
        self._rate_hz = rate_hz
        self._frame_s = frame_s
        self._ahead = round(ahead_s * rate_hz)
        self._channels = _as_slice(channels)
        self._count = len(channels)
        self._pieces: deque[Samples] = deque()
        self._used = 0  # samples of the first piece that lie before the frame
        self._held = 0  # samples from the frame's start on
        self._taken = 0  # samples before the frame, since the start
        self._index = 0
        self._anchor_ns = 0

    @property
    def held_s(self) -> float:
        """Seconds of signal that wait for the rest of their frame."""
        return self._held / self._rate_hz

    def feed(self, samples: Samples, start_ns: int) -> list[Frame]:
        """
        Take the next samples (channels, n), whose first one was taken at *start_ns*, and return the frames now whole.

        Args:
            samples: they follow on what was fed before; they are not copied, so nobody may change them.

            start_ns: UTC, ns since 1970.
        """
        counted_ns = self._anchor_ns + self._elapsed_ns(self._taken + self._held)
        if self._taken + self._held == 0 or abs(start_ns - counted_ns) > _FOLLOW_NS:
            self._anchor_ns = start_ns - self._elapsed_ns(self._taken + self._held)
        self._pieces.append(samples)
        self._held += samples.shape[1]
        frames = []
        while self._held >= self._length() + self._ahead:
            frames.append(self._cut(self._ahead))
        return frames

    def flush(self) -> list[Frame]:
        """Return the whole frames that only waited for what follows them. The stream has ended here."""
        frames = []
        while self._held >= self._length():
            frames.append(self._cut(min(self._ahead, self._held - self._length())))
        return frames

    def restart(self) -> None:
        """Forget all; the next samples begin a new stream."""
        self._pieces.clear()
        self._used = self._held = self._taken = self._index = 0

    def _length(self) -> int:
        return self._edge(self._index + 1) - self._edge(self._index)

    def _edge(self, index: int) -> int:
        return round(index * self._frame_s * self._rate_hz)

    def _elapsed_ns(self, samples: int) -> int:
        return round(samples * 1e9 / self._rate_hz)

    def _cut(self, ahead: int) -> Frame:
        length = self._length()
        # 16 bits fit a float32 whole, converter counts of more do not.
        narrow = self._pieces[0].dtype in (np.dtype(np.float32), np.dtype(np.int16))
        signal = np.empty((self._count, length + ahead), np.float32 if narrow else np.float64)
        filled, skip = 0, self._used
        for piece in self._pieces:
            part = piece[self._channels, skip : skip + length + ahead - filled]
            signal[:, filled : filled + part.shape[1]] = part
            filled += part.shape[1]
            skip = 0
            if filled == length + ahead:
                break
        self._used += length
        while self._pieces and self._used >= self._pieces[0].shape[1]:
            self._used -= self._pieces.popleft().shape[1]
        self._held -= length
        self._taken += length
        self._index += 1
        return Frame(signal[:, :length], signal[:, length:], self._anchor_ns + self._elapsed_ns(self._taken))


def _as_slice(channels: NDArray[np.intp]) -> NDArray[np.intp] | slice:
    """Return neighbouring channels as a slice, which is copied once less."""
    first, count = int(channels[0]), len(channels)
    return slice(first, first + count) if np.array_equal(channels, np.arange(first, first + count)) else channels
