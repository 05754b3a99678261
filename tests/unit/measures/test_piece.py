"""Pieces, separate short records: measured by their spectrum, with no filter state before them."""

import math

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy import signal

from humbell.measures import Bank, analogue
from humbell.model import STANDARD_GRAVITY, Cause, Measure, Quality, Reading
from signals import START_NS, VELOCITY, acceleration, block, noise, point, select, sine, vibration

RMS, G_RMS, PEAK, CREST = (
    Measure.VELOCITY_RMS,
    Measure.ACCELERATION_RMS,
    Measure.ACCELERATION_PEAK,
    Measure.CREST_FACTOR,
)


def piece_readings(samples: NDArray[np.float64], rate_hz: float, full_scale: float | None = None) -> list[Reading]:
    """Return the readings of one piece (1, n) at its point, 10 to 1000 Hz and from 500 Hz."""
    bank = Bank(rate_hz, [point(0, VELOCITY, acceleration(rate_hz))], full_scale)
    return bank.feed(block(samples, rate_hz, piece=True))


@pytest.mark.parametrize("length", [25_600, 25_601])
def test_a_piece_is_measured_by_its_windowed_spectrum(length: int) -> None:
    """
    A piece reads what a periodogram with a Hann window and the mean removed gives, times the squared target response.

    Source: scipy.signal.periodogram, an implementation of its own; the peak is not more than the record's.
    """
    rate_hz = 25_600.0
    samples = noise(7, 1, length) + 3.0
    readings = piece_readings(samples, rate_hz)
    frequencies, density = signal.periodogram(samples[0], rate_hz, window="hann", detrend="constant")
    for band, measured, scale in ((VELOCITY, RMS, 1000), (acceleration(rate_hz), G_RMS, 1 / STANDARD_GRAVITY)):
        power = np.sum(density * np.abs(analogue(band, frequencies)) ** 2) * rate_hz / length
        (reading,) = select(readings, 0, measured)
        assert reading.value == pytest.approx(np.sqrt(power) * scale, rel=1e-9)
        assert (reading.quality, reading.piece) == (Quality.GOOD, True)
        assert reading.span_s == pytest.approx(length / rate_hz)
        assert reading.time_ns == START_NS + round(length / rate_hz * 1e9)
    (peak,) = select(readings, 0, PEAK)
    assert 3 < peak.value / select(readings, 0, G_RMS)[0].value == pytest.approx(select(readings, 0, CREST)[0].value)


def test_a_sine_in_a_piece_reads_its_rms_its_peak_and_its_crest_factor() -> None:
    """The window's share is taken out again: 5 mm/s RMS and 1 g RMS at 5 kHz read so within 0.5 %."""
    rate_hz = 51_200.0
    samples = vibration(rate_hz, 2, 25.0, 5.0) + sine(rate_hz, 2, 5000.0, STANDARD_GRAVITY)
    readings = piece_readings(samples[None], rate_hz)
    assert select(readings, 0, RMS)[0].value == pytest.approx(5.0, rel=0.005)
    assert select(readings, 0, G_RMS)[0].value == pytest.approx(1.0, rel=0.005)
    assert select(readings, 0, PEAK)[0].value == pytest.approx(np.sqrt(2), rel=0.01)
    assert select(readings, 0, CREST)[0].value == pytest.approx(np.sqrt(2), rel=0.01)


def test_a_short_piece_is_uncertain_and_names_the_edge_it_carries() -> None:
    """0.1 s hold one period of 10 Hz: the velocity is uncertain and says from where; 500 Hz are carried."""
    readings = piece_readings(noise(8, 1, 2560), 25_600.0)
    (velocity,) = select(readings, 0, RMS)
    assert (velocity.quality, velocity.cause) == (Quality.UNCERTAIN, Cause.SHORT_PIECE)
    assert velocity.detail == "0.1 s carry a band from 100 Hz, not from 10 Hz"
    assert math.isfinite(velocity.value)
    for measured in (G_RMS, PEAK, CREST):
        assert select(readings, 0, measured)[0].quality is Quality.GOOD


@pytest.mark.parametrize(
    ("place", "value", "cause"),
    [(slice(5, 6), math.nan, "non_finite"), (slice(None), 1.5, "flat"), (slice(9, 18, 3), [50, -50, 51], "clipped")],
)
def test_a_spoilt_piece_says_why(place: slice, value: float | list[float], cause: str) -> None:
    """Pieces pass the same sensor check, a known full scale at both ends; nothing carries over to the next piece."""
    bank = Bank(25_600.0, [point(0, VELOCITY)], 50.0)
    spoilt = noise(9, 1, 25_600)
    spoilt[0, place] = value
    (bad,) = bank.feed(block(spoilt, 25_600.0, piece=True))
    assert (bad.quality, bad.cause) == (Quality.BAD, cause)
    assert math.isfinite(bad.value) == (cause == "clipped")
    (next_one,) = bank.feed(block(noise(10, 1, 25_600), 25_600.0, piece=True))
    assert next_one.quality is Quality.GOOD


def test_a_piece_too_short_to_settle_has_no_peak() -> None:
    """8 ms are over before the 500 Hz flank has settled from both ends: there is no peak and no crest factor."""
    readings = piece_readings(noise(11, 1, 200), 25_600.0)
    for measured in (PEAK, CREST):
        (reading,) = select(readings, 0, measured)
        assert (reading.cause, math.isnan(reading.value)) == (Cause.SHORT_PIECE, True)
    assert math.isfinite(select(readings, 0, G_RMS)[0].value)
