"""What makes raw signal untrustworthy: lost values and a signal that stands still."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.typing import NDArray

from humbell.measures.sensor_check import Findings, SensorCheck
from signals import noise

RATE_HZ = 2560.0
FLAT = 256  # samples in a tenth of a second


def judge(samples: NDArray[np.float64], rate_hz: float = RATE_HZ, full_scale: float = np.nan) -> Findings:
    return SensorCheck(rate_hz, np.full(len(samples), full_scale)).judge(samples)


@pytest.mark.parametrize("value", [np.nan, np.inf, -np.inf])
@pytest.mark.parametrize("place", [0, 1, 1279, 2558, 2559])
def test_one_value_that_is_no_number_spoils_its_channels_frame(value: float, place: int) -> None:
    """A single NaN or infinity anywhere in the frame is found; the other channels are not blamed."""
    samples = noise(1, 3, 2560)
    samples[1, place] = value
    found = judge(samples)
    assert found.non_finite.tolist() == [False, True, False]
    assert found.flat.tolist() == [False, False, False]
    assert found.dead.tolist() == [False, True, False]


@pytest.mark.parametrize("value", [0.0, -9.80665, 1e-12])
def test_a_frame_that_stands_still_is_flat(value: float) -> None:
    """A whole frame of one value is a dead sensor, whatever the value."""
    samples = noise(2, 2, 2560)
    samples[0] = value
    found = judge(samples)
    assert found.flat.tolist() == [True, False]
    assert found.dead.tolist() == [True, False]


@settings(max_examples=100)
@given(start=st.integers(0, 2560 - FLAT))
def test_a_tenth_of_a_second_that_stands_still_is_found_wherever_it_begins(start: int) -> None:
    """A tenth of a second is flat at any place in the frame; one sample less is not."""
    samples = noise(3, 2, 2560)
    samples[0, start : start + FLAT] = 0.25
    samples[1, start : start + FLAT - 1] = 0.25
    assert judge(samples).flat.tolist() == [True, False]


def test_rests_of_a_second_are_searched_to_their_end() -> None:
    """A frame whose length is no multiple of anything is searched to its last sample."""
    for length in (2559, 2561, 2687, 2700):
        samples = noise(4, 1, length)
        samples[0, -FLAT:] = 0.25
        assert judge(samples).flat.tolist() == [True]


def test_a_coarse_slow_converter_is_not_flat() -> None:
    """Fewer than 128 equal samples are no dead sensor, though at 400 Hz they last a quarter of a second and more."""
    samples = np.tile([0.0, 1.0, 0.0, -1.0], (1, 5)).repeat(127, axis=1)
    assert not judge(samples, 400.0).flat.any()
    assert judge(samples.repeat(2, axis=1), 400.0).flat.all()


def test_a_short_record_of_one_value_is_flat() -> None:
    """A piece shorter than a tenth of a second is flat when all of it stands still, and only then."""
    samples = np.stack([np.full(50, 0.5), noise(5, 50)])
    assert judge(samples).flat.tolist() == [True, False]


@pytest.mark.parametrize("steps", [8, 256, 65_536])
def test_healthy_vibration_is_neither_flat_nor_lost(steps: int) -> None:
    """Noise over 3 to 16 bits is sound, so that an idle machine on a coarse converter is watched as well."""
    samples = np.round(noise(6, 4, 2560) * steps / 8)
    found = judge(samples)
    assert not found.dead.any()


def test_a_channel_that_stands_still_at_the_rail_is_dead_and_not_clipped() -> None:
    """An open input often rests at the rail: one cause is named, and it is not vibration that is too strong."""
    samples = noise(7, 2, 2560)
    samples[0] = 50.0
    found = judge(samples, full_scale=50.0)
    assert found.flat.tolist() == [True, False]
    assert found.clipped.tolist() == [0, 0]


@pytest.mark.parametrize("absurd", [1e15, -1e20, 3e38])
def test_values_beyond_any_sensor_count_as_no_numbers(absurd: float) -> None:
    """Finite ones that large would overflow on their way and stay in the filters for ever."""
    samples = np.random.default_rng(1).standard_normal((2, 5120)).astype(np.float32)
    samples[0, 77] = absurd
    found = SensorCheck(5120.0, np.full(2, np.nan)).judge(samples)
    assert found.non_finite.tolist() == [True, False]
