"""What may be set about limits: defaults, and each pair of settings that cannot stand together, by its message."""

from typing import Any

import pytest
from pydantic import ValidationError

from humbell.alarms import DEADBAND_SHARE, LimitSettings


def problem(**settings: float) -> str:
    """Return the one thing that is said against *settings*: key, what, and what to do."""
    with pytest.raises(ValidationError) as caught:
        LimitSettings(**settings)
    (error,) = caught.value.errors()
    return f"{'.'.join(map(str, error['loc']))}: {error['msg'].removeprefix('Value error, ')}"


def test_by_default_nothing_is_judged() -> None:
    """Limits come from the user alone; delays and deadband are our own figures, for no standard publishes any."""
    assert LimitSettings().model_dump() == {
        "high": None,
        "high_high": None,
        "deadband": None,
        "on_delay_s": 10.0,
        "off_delay_s": 30.0,
        "on_pieces": 2,
        "off_pieces": 3,
        "piece_age_s": 3600.0,
    }
    assert LimitSettings().deadband_in_force == 0


@pytest.mark.parametrize(
    ("settings", "deadband"),
    [
        ({"high": 4.5}, 0.45),
        ({"high_high": 7.0}, 0.7),
        ({"high": 4.5, "high_high": 7.1}, 0.45),
        ({"high": 4.5, "high_high": 5.0}, 0.25),
        ({"high": 4.5, "deadband": 0.3}, 0.3),
        ({"high": 4.5, "high_high": 7.1, "deadband": 0.0}, 0.0),
    ],
)
def test_the_deadband_is_a_tenth_of_the_lowest_limit(settings: dict[str, float], deadband: float) -> None:
    """Twice the scatter of steady one-second values (common practice: about 5 %), and never up to the next limit."""
    assert pytest.approx(0.1) == DEADBAND_SHARE
    assert LimitSettings(**settings).deadband_in_force == pytest.approx(deadband)


@pytest.mark.parametrize(
    ("settings", "said"),
    [
        ({"high": 4.5, "high_high": 4.5}, "high_high: 4.5 is not above high=4.5 (give a higher limit)"),
        ({"high": 4.5, "high_high": 4.0}, "high_high: 4 is not above high=4.5 (give a higher limit)"),
        ({"high": 4.5, "deadband": 4.5}, "deadband: 4.5 is not below high=4.5 (give a deadband below the limit)"),
        (
            {"high_high": 7.1, "deadband": 8},
            "deadband: 8 is not below high_high=7.1 (give a deadband below the limit)",
        ),
        (
            {"high": 4.5, "high_high": 7.0, "deadband": 2.5},
            "deadband: 2.5 reaches from high_high=7 down to high=4.5 (give less than 2.5)",
        ),
        (
            {"high": 4.5, "high_high": 5.0, "deadband": 1.0},
            "deadband: 1 reaches from high_high=5 down to high=4.5 (give less than 0.5)",
        ),
        ({"deadband": 0.3}, "deadband: 0.3 has no limit to belong to (give high, or leave the deadband out)"),
    ],
)
def test_each_wrong_pair_is_named_with_what_to_do(settings: dict[str, float], said: str) -> None:
    """Two settings that cannot stand together give one message, with both values and the way out."""
    assert problem(**settings) == said


def test_a_deadband_below_the_distance_of_the_limits_is_good() -> None:
    """So high_high can return while high still stands."""
    settings = LimitSettings(high=4.5, high_high=7.0, deadband=2.49)
    assert settings.deadband_in_force == 2.49


@pytest.mark.parametrize(
    ("settings", "key"),
    [
        ({"high": 0}, "high"),
        ({"high": -1, "deadband": 0.3}, "high"),
        ({"high": float("inf")}, "high"),
        ({"high": float("nan"), "deadband": 0.3}, "high"),
        ({"high_high": float("inf"), "deadband": 0.3}, "high_high"),
        ({"high": 4.5, "deadband": -0.1}, "deadband"),
        ({"high": 4.5, "deadband": float("inf")}, "deadband"),
        ({"on_delay_s": -1}, "on_delay_s"),
        ({"on_delay_s": 3601}, "on_delay_s"),
        ({"off_delay_s": float("nan")}, "off_delay_s"),
        ({"on_pieces": 0}, "on_pieces"),
        ({"off_pieces": 101}, "off_pieces"),
        ({"piece_age_s": 0}, "piece_age_s"),
        ({"hihg": 4.5}, "hihg"),
    ],
)
def test_what_no_limit_can_be_is_refused_once(settings: dict[str, float], key: str) -> None:
    """A limit that could never be reached, or a delay that never ends, is told at its own key and nowhere else."""
    assert problem(**settings).startswith(f"{key}: ")


@pytest.mark.parametrize("settings", [{"on_delay_s": 0, "off_delay_s": 0}, {"on_delay_s": 3600, "off_delay_s": 3600}])
def test_delays_from_none_to_an_hour_are_possible(settings: dict[str, Any]) -> None:
    """Both ends of the range are inside."""
    assert LimitSettings(high=4.5, **settings).on_delay_s == settings["on_delay_s"]
