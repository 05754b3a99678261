"""The digital sections against the analogue target: by their own account, by sines and by impulses."""

import time
from collections.abc import Callable

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy import signal

from humbell.measures import Band, Quantity, analogue
from humbell.measures.bandpass import Bandpass
from humbell.measures.fitting import Design, fit
from humbell.measures.response import settling_s
from signals import RATES_HZ, SLOW_VELOCITY, VELOCITY, acceleration

TOLERANCE = 0.01  # what the magnitude may miss in the band
FOLDED_DB = 85.0  # designed for 90, of which the estimated order of the Kaiser window can miss two or three
LONG_DECIMATORS = ((51_200.0, 0.5, 10.0), (102_400.0, 1.0, 20.0), (102_400.0, 0.5, 10.0))

EVERY_RATE = pytest.mark.parametrize("rate_hz", RATES_HZ)
EVERY_BAND = pytest.mark.parametrize("name", ["velocity", "slow velocity", "acceleration"])


def band_of(name: str, rate_hz: float) -> Band:
    return {"velocity": VELOCITY, "slow velocity": SLOW_VELOCITY, "acceleration": acceleration(rate_hz)}[name]


def in_band(band: Band, count: int) -> NDArray[np.float64]:
    return np.geomspace(band.lower_hz, band.upper_hz, count)


def worst(gain: NDArray[np.float64], band: Band, frequencies: NDArray[np.float64]) -> float:
    """Return the largest relative error of *gain*."""
    return float(np.max(np.abs(gain / np.abs(analogue(band, frequencies)) - 1)))


def amplitudes(design: Design, frequencies: NDArray[np.float64]) -> NDArray[np.float64]:
    """
    Return the amplitude that comes out for a cosine of 1 at each frequency, by least squares after settling.

    Frequencies that the decimator folds are looked for where they come out.
    """
    rate_hz = design.output_rate_hz
    start = settling_s(design.band)
    span_s = start + max(10 / design.band.lower_hz, 2000 / rate_hz)
    moments = np.arange(round(span_s * design.rate_hz)) / design.rate_hz
    bandpass = Bandpass(design, len(frequencies))
    samples = np.cos(2 * np.pi * frequencies[:, None] * moments)
    bandpass.restart(np.arange(len(frequencies)), samples[:, 0])
    output = bandpass.feed(samples)[:, round(start * rate_hz) :]
    found = []
    for frequency_hz, wave in zip(frequencies, output, strict=True):
        turn = 2 * np.pi * frequency_hz / rate_hz * np.arange(wave.size)
        (real, imaginary), *_ = np.linalg.lstsq(np.stack([np.cos(turn), np.sin(turn)], axis=1), wave, rcond=None)
        found.append(np.hypot(real, imaginary))
    return np.array(found)


def impulse_response(design: Design) -> NDArray[np.float64]:
    """
    Return the response at the full rate to one impulse, put together from impulses at every phase of the decimation.

    Output m of the channel whose impulse came at sample p is h[factor (m + 1) - 1 - p], so that the channels, last
    phase first, interleave to h: the FIR convolved with the sections' response at every factor-th sample.
    """
    factor = design.factor
    outputs = round(settling_s(design.band) * design.output_rate_hz) + design.fir.size // factor
    samples = np.zeros((factor, outputs * factor))
    samples[np.arange(factor), np.arange(factor)] = 1
    bandpass = Bandpass(design, factor)
    bandpass.restart(np.arange(factor), np.zeros(factor))
    return np.asarray(bandpass.feed(samples)[::-1].T.reshape(-1))


@EVERY_RATE
@EVERY_BAND
def test_the_design_follows_the_analogue_magnitude(name: str, rate_hz: float) -> None:
    """In the band the design's own account of its gain is within 1 % of the analogue response."""
    band = band_of(name, rate_hz)
    frequencies = in_band(band, 1000)
    assert worst(fit(band, rate_hz).magnitude(frequencies), band, frequencies) <= TOLERANCE


@EVERY_RATE
@EVERY_BAND
def test_sines_come_out_as_the_analogue_filter_would_pass_them(name: str, rate_hz: float) -> None:
    """Sines fed through the running filter come out within 1 % of the analogue response."""
    band = band_of(name, rate_hz)
    frequencies = in_band(band, 6)
    assert worst(amplitudes(fit(band, rate_hz), frequencies), band, frequencies) <= TOLERANCE


@EVERY_RATE
@EVERY_BAND
def test_the_impulse_response_has_the_analogue_magnitude(name: str, rate_hz: float) -> None:
    """The spectrum of the running filter's impulse response is within 1 % of the analogue response in the band."""
    band = band_of(name, rate_hz)
    response = impulse_response(fit(band, rate_hz))
    frequencies = np.arange(response.size // 2 + 1) * rate_hz / response.size
    inside = (frequencies >= band.lower_hz) & (frequencies <= band.upper_hz)
    assert worst(np.abs(np.fft.rfft(response))[inside], band, frequencies[inside]) <= TOLERANCE


def test_the_worst_errors_of_all_rates_are_shown(figure: Callable[[str, str], None]) -> None:
    """The figure names what the listed rates miss at most; it stays below half of what is allowed."""
    errors = {}
    for name in ("velocity", "slow velocity", "acceleration"):
        bands = [(band_of(name, rate_hz), rate_hz) for rate_hz in RATES_HZ]
        errors[name] = max(
            worst(fit(band, rate_hz).magnitude(in_band(band, 1000)), band, in_band(band, 1000))
            for band, rate_hz in bands
        )
    figure("largest error of the magnitude in the band", ", ".join(f"{k} {v:.2%}" for k, v in errors.items()))
    assert max(errors.values()) <= TOLERANCE / 2


@EVERY_RATE
@EVERY_BAND
def test_a_fit_is_stable_repeatable_and_quick(name: str, rate_hz: float) -> None:
    """All poles lie inside the unit circle, a second fit gives the same bits, and either takes well under a second."""
    band = band_of(name, rate_hz)
    fit.cache_clear()
    begin = time.process_time()
    first = fit(band, rate_hz)
    seconds = time.process_time() - begin
    fit.cache_clear()
    second = fit(band, rate_hz)
    np.testing.assert_array_equal(first.sos, second.sos)
    np.testing.assert_array_equal(first.fir, second.fir)
    assert all(np.abs(np.roots(section[3:])).max() < 1 for section in first.sos)
    assert seconds < 0.5


def test_the_same_fit_is_made_once() -> None:
    """A second point with the same band and rate shares the design of the first."""
    assert fit(VELOCITY, 20_000.0) is fit(Band(Quantity.VELOCITY, 10.0, 1000.0), 20_000.0)


@pytest.mark.parametrize(("rate_hz", "highest"), [(2559.0, "999.6"), (2000.0, "781.2"), (99.3, "38.7")])
def test_a_rate_below_2_56_times_the_edge_is_refused_with_the_highest_edge(rate_hz: float, highest: str) -> None:
    """A band that the rate cannot carry is never narrowed in silence; the message names the edge that it could."""
    with pytest.raises(ValueError, match=f"carries a band up to {highest} Hz, not to 1000 Hz"):
        fit(VELOCITY, rate_hz)


@EVERY_RATE
@pytest.mark.parametrize("band", [VELOCITY, SLOW_VELOCITY], ids=["velocity", "slow velocity"])
def test_what_the_decimator_folds_into_the_band_is_attenuated(band: Band, rate_hz: float) -> None:
    """Around every multiple of the lower rate, what would come out in the band is 85 dB below what belongs there."""
    design = fit(band, rate_hz)
    assert folded_db(design) >= FOLDED_DB


def folded_db(design: Design) -> float:
    """Return how far below the band's own content the most of what folds into it lies, dB."""
    frequencies = in_band(design.band, 50)
    multiples = np.arange(1, design.factor // 2 + 1) * design.output_rate_hz
    folding = (multiples[:, None, None] + np.array([[-1.0], [1.0]]) * frequencies).reshape(-1, frequencies.size)
    folding = np.minimum(folding, design.rate_hz - folding)  # those beyond half the rate do not exist
    passed = np.abs(signal.freqz(design.fir, worN=folding.ravel(), fs=design.rate_hz)[1]).reshape(folding.shape)
    own = np.abs(signal.freqz(design.fir, worN=frequencies, fs=design.rate_hz)[1])
    return float(-20 * np.log10(np.max(passed / own, initial=1e-30)))


@pytest.mark.parametrize("rate_hz", [rate_hz for rate_hz in RATES_HZ if rate_hz >= 12_800])
def test_sines_that_fold_come_out_attenuated(rate_hz: float) -> None:
    """Measured: a sine that folds to 160 Hz comes out 85 dB below a sine of 160 Hz."""
    design = fit(VELOCITY, rate_hz)
    own_hz = 160.0
    folding = np.array([own_hz, design.output_rate_hz - own_hz, (design.factor // 2) * design.output_rate_hz - own_hz])
    own, *others = amplitudes(design, folding)
    assert -20 * np.log10(max(others) / own) >= FOLDED_DB


@pytest.mark.parametrize(("rate_hz", "lower_hz", "upper_hz"), LONG_DECIMATORS)
def test_a_narrow_low_band_is_followed_at_a_high_rate(rate_hz: float, lower_hz: float, upper_hz: float) -> None:
    """Where the decimator has ten thousand taps and more, the band is followed and folding held off as elsewhere."""
    band = Band(Quantity.VELOCITY, lower_hz, upper_hz)
    design = fit(band, rate_hz)
    frequencies = in_band(band, 50)
    assert worst(design.magnitude(frequencies), band, frequencies) <= TOLERANCE
    edge = np.array([design.output_rate_hz - upper_hz, upper_hz])
    folding, own = np.abs(signal.freqz(design.fir, worN=edge, fs=rate_hz)[1])
    assert -20 * np.log10(folding / own) >= FOLDED_DB
