"""Settings of the sources, as they stand under `sources:` in the configuration."""

from typing import Literal

from pydantic import BaseModel, ConfigDict, Field

from humbell.model import SampleUnit

# The same limits as for blocks on the wire: no vibration is sampled slower than 1 Hz or faster than 512 kHz.
MIN_RATE_HZ = 1.0
MAX_RATE_HZ = 512_000.0
MAX_CHANNELS = 64


class ReplaySettings(BaseModel):
    """How recorded files are to be understood. Which files are played is said when they are played."""

    model_config = ConfigDict(frozen=True, extra="forbid")

    kind: Literal["replay"] = Field(description="Recorded files, .wav or .npz.")
    unit: SampleUnit | None = Field(
        default=None,
        description="Unit of the samples: g, m/s2, V or counts. WAV files carry none, so they need it; "
        "in an NPZ file that carries one it must be the same.",
    )
    full_scale: float | None = Field(
        default=None,
        gt=0,
        allow_inf_nan=False,
        description="Largest magnitude that the converter gives, in `unit`; makes clipping visible. "
        "PCM WAV files are scaled so that digital full scale is this value (in counts they are not scaled).",
    )
    rate_hz: float | None = Field(
        default=None,
        ge=MIN_RATE_HZ,
        le=MAX_RATE_HZ,
        allow_inf_nan=False,
        description="Rate that is expected, in samples a second and channel (Hz), 1 to 512000. "
        "A file with another rate is refused.",
    )
