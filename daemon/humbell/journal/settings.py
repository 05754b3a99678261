"""What the user may set about the journal."""

from pathlib import Path
from typing import Annotated

from pydantic import BaseModel, ConfigDict, Field


class JournalSettings(BaseModel):
    """Where everything is written to first, and how often."""

    model_config = ConfigDict(frozen=True, extra="forbid")

    path: Annotated[Path, Field(description="the journal's file, SQLite; its folder also holds the control socket")] = (
        Path("/var/lib/humbell/journal.db")
    )
    max_mib: Annotated[
        int,
        Field(ge=16, le=1_000_000, description="largest size, MiB; the oldest one-second values are shed beyond it"),
    ] = 2048
    commit_s: Annotated[
        float,
        Field(
            ge=1,
            le=600,
            description="seconds of readings in one commit: a power cut costs at most so much, a commit wears the card",
        ),
    ] = 60.0
