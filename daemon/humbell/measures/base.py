"""What the measures are asked to do for one point, and the contract of what does it."""

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Protocol

from humbell.measures.response import Band
from humbell.model import Block, PointId, Reading


@dataclass(frozen=True, slots=True)
class BandPlan:
    """
    One band to be measured.

    Args:
        band: quantity and edges.

        frame_s: seconds of signal in one reading.
    """

    band: Band
    frame_s: float


@dataclass(frozen=True, slots=True)
class PointPlan:
    """
    What to measure at one point.

    Args:
        id: the point.

        channel: its row in the blocks of its source.

        gain: m/s² for one unit of a sample.

        bands: the overalls to compute; at most one of each quantity.
    """

    id: PointId
    channel: int
    gain: float
    bands: tuple[BandPlan, ...]


class Measurer(Protocol):
    """Turns the blocks of one source into readings."""

    def feed(self, block: Block) -> Sequence[Reading]:
        """Return the readings that *block*, which follows on the one before it, makes possible."""
        ...

    def reset(self, missing_s: float, end_ns: int) -> Sequence[Reading]:
        """End the stream here: what comes next does not follow on it."""
        ...
