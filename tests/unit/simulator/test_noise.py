"""Broadband noise: as loud as asked for, white, and never the same twice."""

import numpy as np
import pytest

from humbell.model import STANDARD_GRAVITY
from humbell_sim.parts import CHUNK, Noise
from humbell_sim.rendering import Renderer

RATE_HZ = 51_200.0
SAMPLES = 512_000


def test_noise_is_white_and_gaussian() -> None:
    """RMS as asked for, kurtosis 3, and the same power in each eighth of the band, within four standard errors."""
    signal = Renderer([[Noise(2.5, (1,))]], RATE_HZ).render(0, SAMPLES)[0].astype(np.float64) * STANDARD_GRAVITY
    rms = float(np.sqrt(np.mean(signal**2)))
    assert rms == pytest.approx(2.5, rel=4 / np.sqrt(2 * SAMPLES))
    # Standard error of a Gaussian's kurtosis: sqrt(24 / n) (Kendall and Stuart, volume 1; from memory).
    assert np.mean(signal**4) / rms**4 == pytest.approx(3.0, abs=4 * np.sqrt(24 / SAMPLES))
    power = np.abs(np.fft.rfft(signal)[1:]) ** 2
    shares = [part.sum() / power.sum() for part in np.array_split(power, 8)]
    assert shares == pytest.approx([1 / 8] * 8, rel=4 * np.sqrt(8 / (SAMPLES / 2)))


def test_noise_does_not_repeat_from_chunk_to_chunk_or_seed_to_seed() -> None:
    """Chunks and seeds have nothing in common: their correlation is that of chance, below five standard errors."""
    rows = Renderer([[Noise(1.0, (1, 0))], [Noise(1.0, (1, 1))]], RATE_HZ).render(0, 8 * CHUNK)
    chunks = rows.reshape(16, CHUNK)
    others = np.corrcoef(chunks) - np.eye(16)
    assert np.abs(others).max() < 5 / np.sqrt(CHUNK)
