"""The settings of the simulated source: what they are at first, and what they refuse."""

from typing import Any

import pytest
from pydantic import ValidationError

from humbell_sim.settings import TarnholmSettings


def test_the_kind_alone_is_enough() -> None:
    """Everything else has a default: the story's three channels, in real time, without an end."""
    settings = TarnholmSettings(kind="tarnholm")
    assert settings.model_dump() == {
        "kind": "tarnholm",
        "channels": 3,
        "rate_hz": 51_200.0,
        "seed": 1,
        "pace": 1.0,
        "seconds": None,
        "block_s": 0.25,
    }
    assert settings.block_length == 12_800


@pytest.mark.parametrize(
    "wrong",
    [
        {"kind": "replay"},
        {"channels": 0},
        {"channels": 65},
        {"rate_hz": 0.5},
        {"rate_hz": float("nan")},
        {"seed": -1},
        {"pace": -1},
        {"pace": float("inf")},
        {"seconds": 0},
        {"block_s": 0},
        {"block_s": 10.5},
        {"speed": 1},
    ],
)
def test_what_cannot_be_is_refused(wrong: dict[str, Any]) -> None:
    """Each setting has its bounds, and an unknown one is an error."""
    with pytest.raises(ValidationError):
        TarnholmSettings.model_validate({"kind": "tarnholm", **wrong})


def test_a_block_that_no_message_could_carry_is_refused_with_the_longest_that_could() -> None:
    """Blocks have 8 MiB at most on the wire, so what is tried out here could also be sent."""
    with pytest.raises(ValidationError, match=r"31\.3 MiB, more than the 8 .* block_s of at most 0\.063"):
        TarnholmSettings(kind="tarnholm", channels=64, rate_hz=512_000)
    assert TarnholmSettings(kind="tarnholm", channels=64, rate_hz=512_000, block_s=0.063).block_length == 32_256


@pytest.mark.parametrize(
    ("rate_hz", "block_s", "length"), [(1000, 0.0004, 1), (1.06, 10, 10), (48_828.125, 0.25, 12_207)]
)
def test_a_block_has_whole_samples_one_at_least(rate_hz: float, block_s: float, length: int) -> None:
    """Rounded to samples, but never above the 10 s of the wire."""
    assert TarnholmSettings(kind="tarnholm", rate_hz=rate_hz, block_s=block_s).block_length == length


def test_every_setting_says_what_it_is() -> None:
    """Users read the descriptions in their editor."""
    for name, field in TarnholmSettings.model_fields.items():
        assert field.description, name
