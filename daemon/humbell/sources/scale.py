"""From the unit of a source's samples to acceleration in m/s², by the sensor's sensitivity."""

from datetime import date
from typing import Annotated, Self

from pydantic import BaseModel, ConfigDict, Field, model_validator

from humbell.model import STANDARD_GRAVITY, SampleUnit

_Positive = Annotated[float, Field(gt=0, le=1e12)]


class Sensitivity(BaseModel):
    """What the sensor, or sensor and converter together, make of 1 g; one of the three figures is given."""

    model_config = ConfigDict(frozen=True, extra="forbid")

    mV_per_g: Annotated[_Positive | None, Field(description="millivolts for 1 g, for blocks in V")] = None  # noqa: N815
    mV_per_ms2: Annotated[_Positive | None, Field(description="millivolts for 1 m/s2, for blocks in V")] = None  # noqa: N815
    counts_per_g: Annotated[_Positive | None, Field(description="converter counts for 1 g, for blocks in counts")] = (
        None
    )
    calibrated: Annotated[date | None, Field(description="day of the last calibration")] = None
    serial: Annotated[str | None, Field(max_length=64, description="serial number of the sensor")] = None

    @model_validator(mode="after")
    def _one_figure(self) -> Self:
        given = [name for name in ("mV_per_g", "mV_per_ms2", "counts_per_g") if getattr(self, name) is not None]
        if len(given) != 1:
            found = " and ".join(given) or "none"
            raise ValueError(f"needs exactly one of mV_per_g, mV_per_ms2, counts_per_g, found {found} (keep one)")
        return self


def gain(unit: SampleUnit, sensitivity: Sensitivity | None) -> float:
    """
    Return the m/s² that one unit of a sample stands for.

    Raises:
        ValueError: the sensitivity does not belong to *unit*, or is missing.
    """
    match unit:
        case SampleUnit.METRES_PER_SECOND_SQUARED:
            return 1.0
        case SampleUnit.G:
            return STANDARD_GRAVITY
        case SampleUnit.VOLT:
            if sensitivity and sensitivity.mV_per_g:
                return STANDARD_GRAVITY * 1000 / sensitivity.mV_per_g
            if sensitivity and sensitivity.mV_per_ms2:
                return 1000 / sensitivity.mV_per_ms2
            raise ValueError("samples in V need a sensitivity (give sensitivity: {mV_per_g: ...})")
        case SampleUnit.COUNTS:
            if sensitivity and sensitivity.counts_per_g:
                return STANDARD_GRAVITY / sensitivity.counts_per_g
            raise ValueError("samples in counts need a sensitivity (give sensitivity: {counts_per_g: ...})")
