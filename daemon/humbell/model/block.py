"""Samples as they arrive from a source."""

from collections.abc import Mapping
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from humbell.model.units import SampleUnit

# What a source may hand over: converter counts stay integers until they are scaled.
Samples = NDArray[np.float64] | NDArray[np.float32] | NDArray[np.int32] | NDArray[np.int16]


@dataclass(frozen=True, slots=True, eq=False)
class Block:
    """
    Consecutive samples of all channels of one source.

    Args:
        source: id of the source.

        boot: changes when the sender restarts; sequence numbers count within it.

        seq: counts the blocks of this source since *boot*; a jump is a gap.

        start_ns: UTC of the first sample, ns since 1970.

        rate_hz: samples a second and channel.

        unit: unit of *samples*.

        samples: (channels, n), never changed after the block is made.

        piece: a record of its own, with no signal before or behind it.

        full_scale: the largest magnitude that the converter can give, in *unit*; None where unknown.

        aux: side values that came with the block (``rpm``, ``running``, ``temp_C``).
    """

    source: str
    boot: str
    seq: int
    start_ns: int
    rate_hz: float
    unit: SampleUnit
    samples: Samples
    piece: bool = False
    full_scale: float | None = None
    aux: Mapping[str, float] = field(default_factory=dict)

    @property
    def channels(self) -> int:
        """Number of channels."""
        return int(self.samples.shape[0])

    @property
    def length(self) -> int:
        """Samples in each channel."""
        return int(self.samples.shape[1])

    @property
    def end_ns(self) -> int:
        """UTC of the moment behind the last sample, ns since 1970."""
        return self.start_ns + round(self.length * 1e9 / self.rate_hz)
