"""What the measures are asked to do for one point."""

from dataclasses import dataclass

from humbell.measures.response import Band
from humbell.model import PointId


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
