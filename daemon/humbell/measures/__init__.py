"""From blocks to readings: frames, bands, overalls, and what makes a frame untrustworthy."""

from humbell.measures.bank import Bank
from humbell.measures.base import BandPlan, PointPlan
from humbell.measures.overall import MEASURES
from humbell.measures.piece import lowest_edge_hz
from humbell.measures.response import SAMPLES_PER_PERIOD, Band, Quantity, analogue, band_problem, highest_edge_hz
from humbell.measures.settings import AccelerationBand, BandSettings, VelocityBand

__all__ = [
    "MEASURES",
    "SAMPLES_PER_PERIOD",
    "AccelerationBand",
    "Band",
    "BandPlan",
    "BandSettings",
    "Bank",
    "PointPlan",
    "Quantity",
    "VelocityBand",
    "analogue",
    "band_problem",
    "highest_edge_hz",
    "lowest_edge_hz",
]
