"""A bearing defect: when its impacts come, and how they ring."""

import numpy as np
import pytest
from numpy.typing import NDArray

from humbell.model import STANDARD_GRAVITY
from humbell_sim.parts import BearingDefect
from humbell_sim.rendering import Renderer

RATE_HZ = 51_200.0
# Quick to die away, so that each impact stands alone.
DEFECT = BearingDefect(88.433, 4200.0, 0.0004, start_s=1.0, growth=3.0, seed=(7,))


def rendered(defect: BearingDefect, start_s: float, seconds: float) -> NDArray[np.float64]:
    """Return the defect alone, m/s²."""
    samples = Renderer([[defect]], RATE_HZ).render(round(start_s * RATE_HZ), round(seconds * RATE_HZ))[0]
    return np.asarray(samples, dtype=np.float64) * STANDARD_GRAVITY


def onsets_s(signal: NDArray[np.float64]) -> NDArray[np.float64]:
    """Return where it begins to ring after silence, s from the signal's start, found without the defect's own times."""
    loud = np.abs(signal) > 0.02 * np.abs(signal).max()
    # Silent for 4 ms, which is longer than any ringing above the threshold.
    quiet = round(0.004 * RATE_HZ)
    before = np.concatenate([np.zeros(quiet), np.cumsum(loud)])[: len(loud)]
    until = np.concatenate([[0], np.cumsum(loud)])[: len(loud)]
    return np.flatnonzero(loud & (until == before)) / RATE_HZ


def test_impacts_come_at_the_defect_frequency() -> None:
    """Counted in the signal, they are as many as frequency times time, within the slip of the first and the last."""
    found = onsets_s(rendered(DEFECT, 11.0, 20.0))
    assert len(found) == pytest.approx(88.433 * 20, abs=1)
    rate_hz = (len(found) - 1) / (found[-1] - found[0])
    assert rate_hz == pytest.approx(88.433, rel=1e-4)


def test_impacts_slip_by_a_hundredth_of_their_period() -> None:
    """Real rolling elements slip: 1 to 2 % of the period, common practice. Nothing adds up over time."""
    found = onsets_s(rendered(DEFECT, 11.0, 20.0))
    numbers = np.arange(len(found))
    slips = (found - np.polyval(np.polyfit(numbers, found, 1), numbers)) * 88.433
    assert slips.std() == pytest.approx(0.01, rel=0.1)


def test_nothing_is_heard_before_the_defect_begins() -> None:
    """Up to the beginning, less the slip of the first impact, the defect adds nothing at all."""
    assert not rendered(DEFECT, 0.0, 0.99).any()
    assert rendered(DEFECT, 1.0, 1.0).any()


def test_an_impact_rings_as_a_damped_resonance() -> None:
    """
    A exp(-t/tau) sin(2 pi f t) from the very moment of impact, between two samples as it falls.

    The impulse response of a damped single-degree-of-freedom system (common practice), A = growth x time since start.
    """
    defect = BearingDefect(5.0, 4200.0, 0.0012, start_s=1.0, growth=3.0, seed=(7,))
    signal = rendered(defect, 0.0, 12.0)
    time_s = np.arange(len(signal)) / RATE_HZ
    expected = np.zeros_like(signal)
    for at_s in defect.impacts_s(0, 60):
        since_s = np.maximum(time_s - at_s, 0)
        ringing = np.exp(-since_s / 0.0012) * np.sin(2 * np.pi * 4200 * since_s)
        expected += np.where(since_s < 0.0168, 3.0 * (at_s - 1.0) * ringing, 0)
    np.testing.assert_allclose(signal, expected, atol=5e-5)


def test_impacts_may_overlap() -> None:
    """Where an impact comes before the last has died away, both are heard."""
    slow = BearingDefect(88.433, 4200.0, 0.003, start_s=0.0, growth=3.0, seed=(7,))
    at_s = slow.impacts_s(100, 104)
    signal = rendered(slow, 0.0, 2.0)
    number = int(np.ceil(at_s[3] * RATE_HZ)) + 20
    since_s = number / RATE_HZ - at_s
    ringing = slow.growth * at_s * np.exp(-since_s / 0.003) * np.sin(2 * np.pi * 4200 * since_s)
    assert signal[number] == pytest.approx(ringing.sum(), abs=1e-4)


def test_another_seed_has_other_slips_and_batches_join_up() -> None:
    """Slips are drawn in batches; where one is asked for across them it is the same as alone."""
    other = BearingDefect(88.433, 4200.0, 0.0004, start_s=1.0, growth=3.0, seed=(8,))
    whole = DEFECT.impacts_s(0, 1000)
    assert np.all(whole != other.impacts_s(0, 1000))
    np.testing.assert_array_equal(whole[250:260], DEFECT.impacts_s(250, 260))
    assert whole[256] == DEFECT.impacts_s(256, 257)[0]
