"""A broken cable: whole up to one sample, flat from there on."""

import numpy as np
import pytest

from humbell_sim.parts import CHUNK, BrokenCable, Noise
from humbell_sim.rendering import Renderer


@pytest.mark.parametrize("at_s", [0.0, 1.0, CHUNK / 1000, 2 * CHUNK / 1000 - 0.001, 5.0005])
def test_a_broken_cable_is_flat_from_its_moment_on(at_s: float) -> None:
    """Up to the moment the signal is as it was, at the moment and after it every sample is 0."""
    noise = Noise(1.0, (1,))
    whole, broken = Renderer([[noise], [noise, BrokenCable(at_s)]], 1000.0).render(0, 3 * CHUNK)
    first = int(np.ceil(at_s * 1000))
    np.testing.assert_array_equal(broken[:first], whole[:first])
    assert not broken[first:].any()
    assert len(broken[first:]) > CHUNK / 2
