"""What the user may set about the measures: bands and frames."""

from typing import Annotated

from pydantic import BaseModel, ConfigDict, Field, ValidationInfo, field_validator

from humbell.measures.piece import PERIODS
from humbell.measures.response import Band, Quantity

_Edge = Annotated[float, Field(gt=0, le=200_000)]


class BandSettings(BaseModel):
    """A band and the length of the frames that are measured in it."""

    model_config = ConfigDict(frozen=True, extra="forbid")

    band_hz: Annotated[tuple[_Edge, _Edge], Field(description="lower and upper edge of the band, Hz")]
    frame_s: Annotated[
        float | None,
        Field(
            ge=0.1,
            le=60,
            description="seconds of signal in one reading; default: 1, or 10 periods of the lower edge if more",
        ),
    ] = None

    @field_validator("band_hz")
    @classmethod
    def _apart(cls, value: tuple[float, float]) -> tuple[float, float]:
        lower, upper = value
        # Closer edges leave no flat part between the two flanks.
        if upper < 2 * lower:
            raise ValueError(f"{upper:g} Hz is less than twice {lower:g} Hz (give [lower, upper] further apart)")
        return value

    @field_validator("frame_s")
    @classmethod
    def _long_enough(cls, value: float | None, info: ValidationInfo) -> float | None:
        lower = info.data["band_hz"][0] if "band_hz" in info.data else None
        if value is not None and lower is not None and value * lower < PERIODS * (1 - 1e-9):
            raise ValueError(
                f"{value:g} s holds fewer than {PERIODS:g} periods of the lower edge, {lower:g} Hz"
                f" (give {PERIODS / lower:g} or more)"
            )
        return value

    @property
    def frame_in_force_s(self) -> float:
        """Seconds of signal in one reading."""
        return self.frame_s if self.frame_s is not None else max(1.0, PERIODS / self.band_hz[0])

    def band(self, quantity: Quantity) -> Band:
        """Return the band of *quantity* that is asked for."""
        return Band(quantity, *self.band_hz)


class VelocityBand(BandSettings):
    """The band of the overall velocity: general condition."""

    band_hz: Annotated[
        tuple[_Edge, _Edge],
        Field(
            description="lower and upper edge of the velocity band, Hz; a lower edge of 2 for machines below 600 r/min"
        ),
    ] = (10.0, 1000.0)


class AccelerationBand(BandSettings):
    """The band of the overall acceleration: bearing condition."""

    band_hz: Annotated[tuple[_Edge, _Edge], Field(description="lower and upper edge of the acceleration band, Hz")] = (
        500.0,
        16000.0,
    )
