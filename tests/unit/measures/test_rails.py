"""Clipping: at a known full scale, and at one that only the signal gives away."""

from collections.abc import Callable, Iterator

import numpy as np
import pytest
from numpy.typing import NDArray

from humbell.measures.framing import Signal
from humbell.measures.rails import Rails
from signals import noise, times

Wave = NDArray[np.float64]

RATE_HZ = 2560
TYPES = ["float64", "float32", "16 bits", "24 bits", "16 bits and noise"]


def clipped(samples: Signal, full_scale: float = np.nan) -> list[int]:
    """Return the clipped samples of each one-second frame of (n,) samples."""
    rails = Rails(np.array([full_scale]))
    counts = []
    for frame in samples[: samples.size // RATE_HZ * RATE_HZ].reshape(-1, 1, RATE_HZ):
        alive = np.array([True])
        counts.append(int(rails.count(frame, frame.min(axis=1), frame.max(axis=1), alive)[0]))
    return counts


def bounded(seed: int, *shape: int) -> Wave:
    """Return noise that stays within 4 and nowhere rests."""
    return np.asarray(4 * np.tanh(noise(seed, *shape) / 3))


def as_converted(wave: Wave, kind: str) -> Signal:
    """Return *wave* as computed, or as a converter gives it whose range it fills to two thirds."""
    if kind == "float64":
        return wave
    if kind == "float32":
        return wave.astype(np.float32)
    unit = wave / np.abs(wave).max()
    if kind == "16 bits and noise":
        unit += noise(9, unit.size) / 10_000
    return np.asarray(np.round((5_000_000 if kind == "24 bits" else 20_000) * unit))


def sines(seed: int, count: int) -> Iterator[Wave]:
    """Yield waves of one to three harmonics, some with a whole number of samples in each period, 6 s each."""
    rng = np.random.default_rng(seed)
    moments = times(RATE_HZ, 6)
    for _ in range(count):
        frequency_hz = rng.choice([float(rng.integers(1, 60)), rng.uniform(1, 1000), RATE_HZ / rng.integers(3, 40)])
        wave = np.zeros(moments.size)
        for harmonic in range(1, rng.integers(2, 5)):
            phase = rng.choice([0.0, np.pi / 2, rng.uniform(0, 6.28)])
            wave += rng.uniform(0.1, 1) * np.sin(2 * np.pi * frequency_hz * harmonic * moments + phase)
        yield wave * rng.choice([1.0, 9.80665, 0.1])


def test_samples_at_a_known_full_scale_are_counted_on_both_sides() -> None:
    """At 99.95 % of full scale and beyond a sample is clipped, on either side; below it is not."""
    samples = noise(1, RATE_HZ).clip(-4, 4)
    samples[[5, 100, 2000]] = [50.0, -50.0, 49.98]
    samples[[6, 101]] = [49.9, -49.9]
    assert clipped(samples, full_scale=50.0) == [3]


def test_both_ends_of_a_16_bit_converter_are_its_rails() -> None:
    """-32768 and 32767 are clipped at a full scale of 32768, and so is a converter that stops a few counts before."""
    samples = np.round(1000 * noise(2, RATE_HZ)).astype(np.float32)
    samples[[1, 2, 3]] = [-32768, 32767, 32760]
    assert clipped(samples, full_scale=32768.0) == [3]


def test_isolated_samples_at_an_unknown_rail_are_found_from_the_third_on() -> None:
    """
    One sample a second at the same extreme value is a rail; the first two pass unseen.

    Source: `uestc/I_1400_clip.npz`, the record of a real converter, holds 13 isolated samples at its rail in 13 s.
    """
    samples = (20 * noise(3, 13 * RATE_HZ)).clip(-90, 90).astype(np.float32)
    samples[np.arange(13) * RATE_HZ + 700] = 99.8
    assert clipped(samples) == [0, 0] + [1] * 11


@pytest.mark.parametrize("kind", ["float32", "24 bits"])
@pytest.mark.parametrize("sides", [(-1.0, 1.0), (-10.0, 1.2), (-1.2, 10.0)])
def test_chains_of_samples_at_an_unknown_rail_are_found(kind: str, sides: tuple[float, float]) -> None:
    """Noise cut off at one or both sides is found, all of it from the second frame on, whatever its resolution."""
    samples = as_converted(noise(4, 10 * RATE_HZ).clip(*sides), kind)
    frames = samples.reshape(10, RATE_HZ)
    rails = [rail for rail, side in zip((samples.min(), samples.max()), sides, strict=True) if abs(side) < 2]
    wanted = np.isin(frames, rails).sum(axis=1).tolist()
    assert clipped(samples)[1:] == wanted[1:]
    assert min(wanted) > 100


def test_a_value_beyond_it_takes_a_rail_back() -> None:
    """What was taken for a rail is none once the signal has gone beyond."""
    samples = bounded(5, 8 * RATE_HZ)
    samples[np.arange(5) * RATE_HZ + 700] = 5.0
    samples[5 * RATE_HZ + 700] = 6.0
    samples[np.arange(6, 8) * RATE_HZ + 700] = 5.0
    assert clipped(samples) == [0, 0, 1, 1, 1, 0, 0, 0]


def test_computed_waves_are_never_called_clipped(figure: Callable[[str, str], None]) -> None:
    """A sine and its harmonics repeat their extremes and have round tops: no frame of any is called clipped."""
    waves = list(sines(6, 100))
    called = {
        kind: np.count_nonzero([count for wave in waves for count in clipped(as_converted(wave, kind))])
        for kind in TYPES
    }
    figure("frames of computed waves called clipped, of 600 each", ", ".join(f"{k} {v}" for k, v in called.items()))
    assert not any(called.values())


def test_a_loop_of_noise_under_a_wave_that_swells_is_never_called_clipped() -> None:
    """Some of its frames come thrice and others once, so the extreme repeats alone; its neighbours repeat with it."""
    loop = np.random.default_rng(5).normal(0, 0.01, (16, 8, 128))[:, 1]
    wave = 2 * np.pi * 0.04 * np.sqrt(2) * np.cos(2 * np.pi * 10 * np.arange(128) / 128)
    rails = Rails(np.array([np.nan]))
    for first in range(150, 226, 4):
        blocks = [(1.0 if k / 4 % 39 < 9 else 6.0) * wave + loop[k % 16] for k in range(first, first + 4)]
        frame = np.concatenate(blocks)[None].astype(np.float32)
        assert rails.count(frame, frame.min(axis=1), frame.max(axis=1), np.array([True])).tolist() == [0]


@pytest.mark.parametrize("kind", TYPES[1:])
def test_a_record_played_in_a_loop_is_never_called_clipped(kind: str) -> None:
    """A signal that repeats as a whole repeats its extreme once in each loop, and its other values too."""
    record = noise(7, int(2.7 * RATE_HZ))
    assert not any(clipped(np.tile(as_converted(record, kind).astype(np.float64), 8)))


@pytest.mark.parametrize("bits", [8, 10])
def test_a_coarse_converter_is_never_called_clipped_unless_its_full_scale_is_known(bits: int) -> None:
    """Where extremes repeat by chance nothing is learnt; a known full scale is counted at any resolution."""
    top = 2.0 ** (bits - 1)
    quiet = np.round(noise(8, 20 * RATE_HZ) * top / 8)
    loud = np.round(noise(8, 20 * RATE_HZ) * top / 2).clip(-top, top - 1)
    assert not any(clipped(quiet))
    assert not any(clipped(loud))
    assert not any(clipped(quiet, full_scale=top))
    assert sum(clipped(loud, full_scale=top - 1)) == np.count_nonzero(np.abs(loud) >= top - 1)


def test_channels_learn_their_rails_apart_and_dead_ones_not_at_all() -> None:
    """What one channel shows says nothing about another; a frame that is not alive is neither counted nor learnt."""
    rails = Rails(np.array([np.nan, np.nan, np.nan]))
    counts = []
    for second in range(5):
        frame = bounded(10 + second, 3, RATE_HZ)
        frame[0, 700] = frame[2, 700] = 5.0
        alive = np.array([True, True, False])
        counts.append(rails.count(frame, frame.min(axis=1), frame.max(axis=1), alive).tolist())
    assert counts == [[0, 0, 0], [0, 0, 0], [1, 0, 0], [1, 0, 0], [1, 0, 0]]


def test_a_frame_that_hangs_at_an_unknown_rail_is_clipped_throughout() -> None:
    """Two samples at the rail, then the rail alone, to within less than any converter resolves: all is clipped."""
    samples = np.full(2 * RATE_HZ, 50.0)
    samples[:RATE_HZ] = bounded(14, RATE_HZ)
    samples[[10, 700]] = 50.0
    samples[RATE_HZ::2] -= 1e-9
    assert clipped(samples) == [0, RATE_HZ]
