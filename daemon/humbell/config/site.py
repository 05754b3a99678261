"""The configuration of one node: the stages' own settings, composed."""

import math
from typing import Annotated, Literal

from pydantic import BaseModel, BeforeValidator, ConfigDict, Field, model_validator

from humbell.alarms import LimitSettings
from humbell.config.plugins import SourceSettings
from humbell.journal import JournalSettings
from humbell.measures import AccelerationBand, VelocityBand
from humbell.model import ChannelId, Id
from humbell.sources import Sensitivity
from humbell.wire import BrokerSettings


def _off(value: object) -> object:
    return None if value is False else value


def _channel(value: object) -> object:
    return ChannelId.parse(str(value))


_Positive = Annotated[float, Field(gt=0, allow_inf_nan=False)]


class _Settings(BaseModel):
    model_config = ConfigDict(frozen=True, extra="forbid")


class Velocity(VelocityBand, LimitSettings):
    """Overall velocity, the general condition: band and limits, mm/s RMS."""


class Acceleration(AccelerationBand, LimitSettings):
    """Overall acceleration, the bearing condition: band and limits, g RMS."""


class Bearing(_Settings):
    """A rolling bearing, by its geometry or by the multiples of shaft speed that its maker gives."""

    elements: Annotated[int | None, Field(ge=3, le=200, description="number of rolling elements in a row")] = None
    element_mm: Annotated[_Positive | None, Field(description="diameter of a rolling element, mm")] = None
    pitch_mm: Annotated[_Positive | None, Field(description="pitch diameter, mm")] = None
    angle_deg: Annotated[float, Field(ge=0, lt=90, description="contact angle, degrees")] = 0.0
    bpfo: Annotated[_Positive | None, Field(description="outer race defects a turn of the shaft")] = None
    bpfi: Annotated[_Positive | None, Field(description="inner race defects a turn of the shaft")] = None
    bsf: Annotated[_Positive | None, Field(description="turns of a rolling element a turn of the shaft")] = None
    ftf: Annotated[float | None, Field(gt=0, lt=1, description="turns of the cage a turn of the shaft")] = None

    @model_validator(mode="after")
    def _one_way(self) -> "Bearing":
        geometry = (self.elements, self.element_mm, self.pitch_mm)
        multiples = (self.bpfo, self.bpfi, self.bsf, self.ftf)
        whole = [all(value is not None for value in way) for way in (geometry, multiples)]
        part = [any(value is not None for value in way) for way in (geometry, multiples)]
        if whole != part or sum(whole) != 1:
            raise ValueError(
                "needs either elements, element_mm and pitch_mm, or bpfo, bpfi, bsf and ftf (give one set whole)"
            )
        if self.element_mm is not None and self.pitch_mm is not None and self.element_mm >= self.pitch_mm:
            raise ValueError(f"element_mm={self.element_mm:g} is not below pitch_mm={self.pitch_mm:g} (check the two)")
        return self

    @property
    def multiples(self) -> dict[str, float]:
        """
        Events a turn of the shaft, with the outer race at rest.

        With r = d/D cos(angle): BPFO n/2 (1 - r), BPFI n/2 (1 + r), BSF D/(2 d) (1 - r²), FTF (1 - r)/2; kinematics of
        pure rolling (T. A. Harris, Rolling Bearing Analysis; common practice). Slip shifts them by a per cent or so.
        """
        if self.elements is None or self.element_mm is None or self.pitch_mm is None:
            return {"bpfo": self.bpfo or 0, "bpfi": self.bpfi or 0, "bsf": self.bsf or 0, "ftf": self.ftf or 0}
        r = self.element_mm / self.pitch_mm * math.cos(math.radians(self.angle_deg))
        return {
            "bpfo": self.elements / 2 * (1 - r),
            "bpfi": self.elements / 2 * (1 + r),
            "bsf": self.pitch_mm / (2 * self.element_mm) * (1 - r**2),
            "ftf": (1 - r) / 2,
        }


class Speed(_Settings):
    """How fast the shaft turns."""

    rpm: Annotated[float, Field(gt=0, le=200_000, description="fixed speed of the shaft, r/min")]


class Point(_Settings):
    """One sensor position and direction on a machine."""

    channel: Annotated[
        ChannelId,
        BeforeValidator(_channel, json_schema_input_type=str),
        Field(description="the signal, SOURCE/NUMBER; numbers start at 0"),
    ]
    sensitivity: Annotated[
        Sensitivity | None, Field(description="for blocks in V or counts; leave out where they carry g or m/s2")
    ] = None
    mount: Annotated[
        Literal["stud", "adhesive", "magnet", "hand"] | None,
        Field(description="how the sensor is fitted; with the sensor it decides what may be compared"),
    ] = None
    bearing: Annotated[Bearing | None, Field(description="the bearing next to the sensor")] = None
    velocity: Annotated[
        Velocity | None, BeforeValidator(_off), Field(description="general condition; `off`: not measured")
    ] = Field(default_factory=Velocity)
    acceleration: Annotated[
        Acceleration | None, BeforeValidator(_off), Field(description="bearing condition; `off`: not measured")
    ] = Field(default_factory=Acceleration)

    @model_validator(mode="after")
    def _measures_something(self) -> "Point":
        if self.velocity is None and self.acceleration is None:
            raise ValueError(
                "velocity and acceleration are both off, so nothing is measured (leave one on, or take the point out)"
            )
        return self


class Machine(_Settings):
    """A machine train with its points."""

    name: Annotated[str | None, Field(max_length=120, description="what people call it")] = None
    group: Annotated[Id | None, Field(description="sister machines share a group")] = None
    speed: Annotated[Speed | None, Field(description="speed of the shaft")] = None
    points: Annotated[dict[Id, Point], Field(min_length=1, description="sensor positions, by id")]


class Site(_Settings):
    """One node: where it is, what it reads and what it watches."""

    site: Annotated[Id, Field(description="id of the plant")]
    node: Annotated[Id | None, Field(description="id of this computer; default: from its serial number")] = None
    journal: Annotated[JournalSettings, Field(description="where everything is written to first")] = Field(
        default_factory=JournalSettings
    )
    brokers: Annotated[dict[Id, BrokerSettings], Field(description="MQTT brokers, by id")] = Field(default_factory=dict)
    sources: Annotated[dict[Id, SourceSettings], Field(min_length=1, description="what delivers samples, by id")]
    machines: Annotated[dict[Id, Machine], Field(min_length=1, description="what is watched, by id")]
