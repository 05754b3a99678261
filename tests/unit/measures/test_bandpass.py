"""The running filter: its state carries over cuts, and starts where the signal starts."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.typing import NDArray
from scipy import signal

from humbell.measures import Band, Quantity
from humbell.measures.bandpass import Bandpass
from humbell.measures.fitting import Design, fit
from signals import VELOCITY, acceleration, cuts, noise, parts

LENGTH = 1503  # 3 samples more than whole groups of the decimators
CHANNELS = 3
# Factors 1, 2 and 10; at 51.2 kS/s the decimator has 110 taps.
DESIGNS = [
    fit(VELOCITY, 2560.0),
    fit(VELOCITY, 12_800.0),
    fit(VELOCITY, 51_200.0),
    fit(acceleration(51_200.0), 51_200.0),
]
EVERY_DESIGN = pytest.mark.parametrize("design", DESIGNS, ids=lambda d: f"{d.band.quantity}-{d.rate_hz:g}")
ALL = np.arange(CHANNELS)


def whole(design: Design, samples: NDArray[np.float64]) -> NDArray[np.float64]:
    """Return what a new filter makes of *samples* in one go."""
    bandpass = Bandpass(design, len(samples))
    bandpass.restart(np.arange(len(samples)), samples[:, 0])
    return bandpass.feed(samples)


def test_the_designs_of_these_tests_decimate_differently() -> None:
    """The tests cover no decimation, decimation by two and by ten."""
    assert [design.factor for design in DESIGNS] == [1, 2, 10, 1]


@settings(max_examples=40)
@given(places=cuts(LENGTH), design=st.sampled_from(DESIGNS))
def test_the_output_does_not_depend_on_how_the_signal_is_cut(places: list[int], design: Design) -> None:
    """In parts == whole, to 1e-9 of the largest output, whatever the parts' lengths."""
    samples = noise(1, CHANNELS, LENGTH) + 5
    wanted = whole(design, samples)
    bandpass = Bandpass(design, CHANNELS)
    bandpass.restart(ALL, samples[:, 0])
    output = np.concatenate([bandpass.feed(np.asarray(part, np.float64)) for part in parts(samples, places)], axis=1)
    assert output.shape == wanted.shape
    np.testing.assert_allclose(output, wanted, rtol=0, atol=1e-9 * np.abs(wanted).max())


@EVERY_DESIGN
def test_single_samples_add_up_to_the_whole(design: Design) -> None:
    """A feed shorter than the decimation factor is kept for the next one, and gives no output of its own."""
    samples = noise(2, 1, 57)
    bandpass = Bandpass(design, 1)
    bandpass.restart(np.arange(1), samples[:, 0])
    outputs = [bandpass.feed(samples[:, i : i + 1]) for i in range(57)]
    assert sum(output.shape[1] for output in outputs) == 57 // design.factor
    np.testing.assert_allclose(np.concatenate(outputs, axis=1), whole(design, samples), rtol=1e-9, atol=1e-15)


@EVERY_DESIGN
def test_the_output_is_that_of_a_plain_convolution_and_scipys_sections(design: Design) -> None:
    """
    The filter is the design's FIR, every factor-th sample of it, and the design's sections, from the steady state.

    Source: numpy.convolve and scipy.signal.sosfilt on the whole signal.
    """
    samples = noise(3, 2, LENGTH) + 2
    for row, output in zip(samples, whole(design, samples), strict=True):
        padded = np.concatenate([np.full(design.fir.size - 1, row[0]), row])
        # Groups of `factor` samples begin with the first one; the last sample of each group is its output's.
        kept = np.convolve(padded, design.fir, mode="valid")[design.factor - 1 :: design.factor]
        wanted, _ = signal.sosfilt(design.sos, kept, zi=signal.sosfilt_zi(design.sos) * row[0])
        np.testing.assert_allclose(output, wanted, rtol=0, atol=1e-9 * np.abs(wanted).max())


@EVERY_DESIGN
def test_restarting_some_channels_leaves_the_others_alone(design: Design) -> None:
    """
    The others give the same bits as if nothing had happened; the restarted ones forget what was before.

    Of a group of the decimator that had begun, the samples are replaced by the new first one.
    """
    samples = noise(4, CHANNELS, 2 * LENGTH)
    first, second = samples[:, :LENGTH], samples[:, LENGTH:]
    undisturbed = Bandpass(design, CHANNELS)
    undisturbed.restart(ALL, first[:, 0])
    undisturbed.feed(first)
    disturbed = Bandpass(design, CHANNELS)
    disturbed.restart(ALL, first[:, 0])
    disturbed.feed(first)
    disturbed.restart(np.array([1]), second[1:2, 0])
    output, wanted = disturbed.feed(second), undisturbed.feed(second)
    np.testing.assert_array_equal(output[[0, 2]], wanted[[0, 2]])
    assert not np.allclose(output[1], wanted[1])
    begun = np.concatenate([np.full(LENGTH % design.factor, second[1, 0]), second[1]])
    np.testing.assert_allclose(output[1], whole(design, begun[None])[0], rtol=0, atol=1e-9 * np.abs(wanted).max())


@pytest.mark.parametrize("rate_hz", [2560.0, 12_800.0, 51_200.0, 102_400.0])
@pytest.mark.parametrize("quantity", list(Quantity))
def test_a_constant_gives_nothing_from_the_first_sample_on(quantity: Quantity, rate_hz: float) -> None:
    """After a restart with its own first sample a constant, such as gravity, leaves less than a billionth of it."""
    design = fit(Band(quantity, 10.0, 1000.0), rate_hz)
    samples = np.full((1, 4000), 9.80665)
    assert np.abs(whole(design, samples)).max() < 1e-9 * 9.80665


@EVERY_DESIGN
def test_float32_samples_give_the_output_of_float64_ones(design: Design) -> None:
    """A decimator that works in float32 loses nothing that counts: 1e-5 of the largest output, at ten times offset."""
    narrow = (noise(5, 1, LENGTH) + 10).astype(np.float32)
    bandpass = Bandpass(design, 1)
    bandpass.restart(np.arange(1), narrow[:, 0].astype(np.float64))
    wanted = whole(design, narrow.astype(np.float64))
    np.testing.assert_allclose(bandpass.feed(narrow), wanted, rtol=0, atol=1e-5 * np.abs(wanted).max())
