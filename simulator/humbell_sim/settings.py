"""Settings of the simulated source, as they stand under `sources:` in the configuration."""

from typing import Literal, Self

from pydantic import BaseModel, ConfigDict, Field, model_validator

from humbell.wire.block import MAX_BYTES, MAX_CHANNELS, MAX_RATE_HZ, MAX_SECONDS, MIN_RATE_HZ
from humbell_sim.tarnholm import CHANNELS, RATE_HZ

_SAMPLE_BYTES = 4  # float32
_FRAME_BYTES = 1024  # of a block on the wire, what is not samples: an eighth of this, and room to grow


class TarnholmSettings(BaseModel):
    """The invented Tarnholm Water works as a source: each channel plays its machine's part of the story, in g."""

    model_config = ConfigDict(frozen=True, extra="forbid")

    kind: Literal["tarnholm"] = Field(description="Simulated machines; from the package's simulator.")
    channels: int = Field(
        default=CHANNELS,
        ge=1,
        le=MAX_CHANNELS,
        description="Number of channels, 1 to 64. The story has three; they come again with noise of their own.",
    )
    rate_hz: float = Field(
        default=RATE_HZ,
        ge=MIN_RATE_HZ,
        le=MAX_RATE_HZ,
        allow_inf_nan=False,
        description="Rate, in samples a second and channel (Hz), 1 to 512000. "
        "Below 10 kHz the bearing's resonance (4.2 kHz) folds.",
    )
    seed: int = Field(default=1, ge=0, description="The same seed gives the same samples.")
    pace: float = Field(
        default=1.0,
        ge=0,
        allow_inf_nan=False,
        description="Seconds of signal a second: 1 is real time, 60 a minute a second; 0: as fast as it is read. "
        "Times of blocks are those of the signal, so they run ahead of the clock above 1.",
    )
    seconds: float | None = Field(
        default=None,
        gt=0,
        allow_inf_nan=False,
        description="Seconds of signal after which the source ends; null: never.",
    )
    block_s: float = Field(
        default=0.25,
        gt=0,
        le=MAX_SECONDS,
        allow_inf_nan=False,
        description="Seconds of signal in a block, up to 10, rounded to samples.",
    )

    @property
    def block_length(self) -> int:
        """Samples of a channel in a block."""
        return max(1, min(round(self.block_s * self.rate_hz), int(MAX_SECONDS * self.rate_hz)))

    @model_validator(mode="after")
    def _fits_a_message(self) -> Self:
        # The same limit as on the wire, so that what is tried out here can also be sent.
        size = self.channels * self.block_length * _SAMPLE_BYTES + _FRAME_BYTES
        if size > MAX_BYTES:
            most = (MAX_BYTES - _FRAME_BYTES) // (self.channels * _SAMPLE_BYTES) / self.rate_hz
            raise ValueError(
                f"blocks of {self.channels} channels at {self.rate_hz:g} Hz and {self.block_s:g} s have "
                f"{size / 2**20:.1f} MiB, more than the {MAX_BYTES // 2**20} that one may have "
                f"(give a block_s of at most {int(most * 1000) / 1000:g})"
            )
        return self
