"""What a point hears, part by part. Each is a function of the sample's number alone, so cutting changes nothing."""

from humbell_sim.parts.base import CHUNK, Chunk, Part
from humbell_sim.parts.bearing import BearingDefect
from humbell_sim.parts.cable import BrokenCable
from humbell_sim.parts.noise import Noise
from humbell_sim.parts.shaft import Order, ShaftOrders

__all__ = ["CHUNK", "BearingDefect", "BrokenCable", "Chunk", "Noise", "Order", "Part", "ShaftOrders"]
