"""What the user may set about the limits of one measure."""

from typing import Annotated

from pydantic import BaseModel, ConfigDict, Field, ValidationInfo, field_validator

# No deadband or delay for vibration is published in the alarm standards; these defaults are our own. A tenth of the
# limit is twice the scatter of one-second values of a steady machine (common practice: about 5 %).
DEADBAND_SHARE = 0.1


class LimitSettings(BaseModel):
    """The limits of one measure. Table values are general guidance; local codes and a qualified analyst decide."""

    model_config = ConfigDict(frozen=True, extra="forbid")

    high: Annotated[
        float | None,
        Field(
            gt=0,
            allow_inf_nan=False,
            description="limit of the alarm `high`, in the unit of the measure, RMS; none: not judged",
        ),
    ] = None
    high_high: Annotated[
        float | None,
        Field(
            gt=0, allow_inf_nan=False, description="limit of the alarm `high_high`, above `high`; none: no such alarm"
        ),
    ] = None
    deadband: Annotated[
        float | None,
        Field(
            ge=0,
            allow_inf_nan=False,
            description="an alarm returns below limit - deadband; default: a tenth of the lowest limit",
        ),
    ] = None
    on_delay_s: Annotated[
        float, Field(ge=0, le=3600, description="seconds of signal at or above a limit before its alarm is raised")
    ] = 10.0
    off_delay_s: Annotated[
        float, Field(ge=0, le=3600, description="seconds of signal below limit - deadband before its alarm returns")
    ] = 30.0
    on_pieces: Annotated[
        int, Field(ge=1, le=100, description="of separate records: how many in a row raise an alarm")
    ] = 2
    off_pieces: Annotated[
        int, Field(ge=1, le=100, description="of separate records: how many in a row let it return")
    ] = 3
    piece_age_s: Annotated[
        float,
        Field(
            gt=0,
            le=604_800,
            description="of separate records: a later one than this does not count with the one before",
        ),
    ] = 3600.0

    @property
    def deadband_in_force(self) -> float:
        """The deadband, in the unit of the measure; 0 without any limit."""
        if self.deadband is not None:
            return self.deadband
        limits = [limit for limit in (self.high, self.high_high) if limit is not None]
        share = DEADBAND_SHARE * min(limits, default=0.0)
        if self.high is not None and self.high_high is not None:
            return min(share, (self.high_high - self.high) / 2)
        return share

    @field_validator("high_high")
    @classmethod
    def _above_high(cls, value: float | None, info: ValidationInfo) -> float | None:
        high = info.data.get("high")
        if value is not None and high is not None and value <= high:
            raise ValueError(f"{value:g} is not above high={high:g} (give a higher limit)")
        return value

    @field_validator("deadband")
    @classmethod
    def _below_the_limits(cls, value: float | None, info: ValidationInfo) -> float | None:
        high, high_high = info.data.get("high"), info.data.get("high_high")
        if value is None:
            return value
        limits: dict[str, float] = {name: info.data[name] for name in ("high", "high_high") if info.data.get(name)}
        if not limits:
            if not {"high", "high_high"} <= info.data.keys():
                return value  # a limit is there, but is wrong itself: one message is enough
            raise ValueError(f"{value:g} has no limit to belong to (give high, or leave the deadband out)")
        name, lowest = next(iter(limits.items()))
        if value >= lowest:
            raise ValueError(f"{value:g} is not below {name}={lowest:g} (give a deadband below the limit)")
        if high is not None and high_high is not None and value >= high_high - high > 0:
            raise ValueError(
                f"{value:g} reaches from high_high={high_high:g} down to high={high:g}"
                f" (give less than {high_high - high:g})"
            )
        return value
