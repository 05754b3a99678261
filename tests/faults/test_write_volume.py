"""What a day of sixteen points costs a card: bytes given to the device, counted by the kernel, not timed."""

import json
from pathlib import Path

import pytest

from faults.load import start
from faults.rows import Figure

MOST_BYTES = 100e6  # a day, the design's limit
DAY_MINUTES = 24 * 60


def day(folder: Path, minutes: int, figure: Figure) -> float:
    """Keep a journal for *minutes*, and return what a day costs at that rate, in bytes."""
    with start("keep", folder, minutes) as writer:
        output, _ = writer.communicate()
    assert writer.returncode == 0
    found = json.loads(output)
    assert found["written"] > found["file"] > 0, f"{folder} is on no disk: nothing of what is written there counts"
    scale = DAY_MINUTES / minutes
    figure(
        f"written for 16 points in {minutes / 60:g} h",
        f"{found['written'] * scale / 1e6:.1f} MB a day (at most {MOST_BYTES / 1e6:.0f}); "
        f"the file grows by {found['file'] * scale / 1e6:.1f} MB a day",
    )
    return float(found["written"] * scale)


@pytest.mark.slow
def test_a_day_of_sixteen_points_costs_at_most_a_hundred_megabytes(tmp_path: Path, figure: Figure) -> None:
    """By two simulated hours with six transitions each, after the file has been made."""
    assert day(tmp_path, 120, figure) <= MOST_BYTES


@pytest.mark.long
def test_a_whole_day_of_sixteen_points_costs_at_most_a_hundred_megabytes(tmp_path: Path, figure: Figure) -> None:
    """The same, with the hourly roll-ups and a file of a day's size."""
    assert day(tmp_path, DAY_MINUTES, figure) <= MOST_BYTES
