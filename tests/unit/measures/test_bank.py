"""From blocks to readings: known vibration gives known values, and what cannot be trusted says so."""

import dataclasses
import math
from collections.abc import Sequence

import numpy as np
import pytest
from hypothesis import given, settings
from numpy.typing import NDArray
from scipy import signal

from humbell.measures import Band, Bank, Quantity, highest_edge_hz
from humbell.model import STANDARD_GRAVITY, Cause, ConfigError, Measure, Quality, Reading
from signals import (
    RATES_HZ,
    SLOW_VELOCITY,
    START_NS,
    VELOCITY,
    acceleration,
    block,
    cuts,
    good,
    measure,
    noise,
    parts,
    point,
    select,
    sine,
    vibration,
)

RATE_HZ = 2560.0
SECOND_NS = 1_000_000_000
# Calibrators run at 159.155 Hz, 1000 rad/s, where 10 m/s² are 10 mm/s. An encyclopaedia's page "Vibration calibrator"
# and arithmetic (S1 and MX in the table of check values). The acceleration band from 500 Hz does not pass 159 Hz at
# full gain, so that the value in g is checked in a band that does, and the usual band by a sine of 5 kHz.
CALIBRATOR_HZ = 1000 / (2 * np.pi)
WIDE = Band(Quantity.ACCELERATION, 10.0, 5000.0)
RMS, G_RMS, PEAK, CREST = (
    Measure.VELOCITY_RMS,
    Measure.ACCELERATION_RMS,
    Measure.ACCELERATION_PEAK,
    Measure.CREST_FACTOR,
)


def same(one: Sequence[Reading], other: Sequence[Reading]) -> bool:
    """Tell whether readings agree: values to 1e-9 of themselves, all else to the bit."""
    return len(one) == len(other) and all(
        dataclasses.replace(a, value=0.0) == dataclasses.replace(b, value=0.0)
        and (math.isclose(a.value, b.value, rel_tol=1e-9) or (math.isnan(a.value) and math.isnan(b.value)))
        for a, b in zip(one, other, strict=True)
    )


def causes(readings: Sequence[Reading], channel: int, measured: Measure = RMS) -> list[str]:
    """Return the causes of one measure's readings, in order; "good" where there is none."""
    return [reading.cause or "good" for reading in select(readings, channel, measured)]


@pytest.mark.parametrize("rate_hz", RATES_HZ)
def test_the_calibrator_point_reads_10_mm_s(rate_hz: float) -> None:
    """10 m/s² RMS at 159.155 Hz read 10.00 mm/s RMS within 0.5 %, at every rate."""
    values = good(
        measure(Bank(rate_hz, [point(0, VELOCITY)], None), sine(rate_hz, 4, CALIBRATOR_HZ, 10)[None], rate_hz), 0, RMS
    )
    assert values.size >= 2
    np.testing.assert_allclose(values, 10.0, rtol=0.005)


@pytest.mark.parametrize("rate_hz", [rate_hz for rate_hz in RATES_HZ if highest_edge_hz(rate_hz) >= 5000])
def test_the_calibrator_point_reads_its_acceleration_in_g(rate_hz: float) -> None:
    """10 m/s² RMS at 159.155 Hz read 1.0197 g RMS within 0.5 %, the peak 1.414 times that, the crest factor 1.414."""
    bank = Bank(rate_hz, [point(0, WIDE)], None)
    readings = measure(bank, sine(rate_hz, 3, CALIBRATOR_HZ, 10)[None], rate_hz)
    np.testing.assert_allclose(good(readings, 0, G_RMS), 1.0197, rtol=0.005)
    np.testing.assert_allclose(good(readings, 0, PEAK), 1.0197 * np.sqrt(2), rtol=0.005)
    np.testing.assert_allclose(good(readings, 0, CREST), np.sqrt(2), rtol=0.005)


@pytest.mark.parametrize("rate_hz", [rate_hz for rate_hz in RATES_HZ if highest_edge_hz(rate_hz) >= 16_000])
def test_5_khz_pass_the_bearing_band_at_full_gain(rate_hz: float) -> None:
    """10 m/s² RMS at 5 kHz read 1.0197 g RMS within 0.5 % from 500 Hz to 16 kHz."""
    bank = Bank(rate_hz, [point(0, acceleration(rate_hz))], None)
    values = good(measure(bank, sine(rate_hz, 3, 5000.0, 10)[None], rate_hz), 0, G_RMS)
    assert values.size >= 2
    np.testing.assert_allclose(values, 1.0197, rtol=0.005)


def test_the_gain_turns_samples_into_metres_per_second_squared() -> None:
    """Each channel has its own gain; its sign and the order of the channels make no difference to the values."""
    wave = sine(RATE_HZ, 3, CALIBRATOR_HZ)
    plans = [point(2, VELOCITY, gain=10.0), point(0, VELOCITY, gain=-5.0), point(1, VELOCITY, gain=1e-3)]
    readings = measure(Bank(RATE_HZ, plans, None), np.stack([2 * wave, 1e4 * wave, wave]), RATE_HZ)
    for channel in range(3):
        np.testing.assert_allclose(good(readings, channel, RMS), 10.0, rtol=0.005)


def test_two_vibrations_add_by_their_squares() -> None:
    """3 and 4 mm/s RMS at two frequencies read 5 mm/s RMS. Source: textbook, and ISO 10816-1 Annex A from memory."""
    samples = vibration(RATE_HZ, 4, 25.0, 3.0) + vibration(RATE_HZ, 4, 160.0, 4.0)
    values = good(measure(Bank(RATE_HZ, [point(0, VELOCITY)], None), samples[None], RATE_HZ), 0, RMS)
    np.testing.assert_allclose(values, 5.0, rtol=0.005)


@settings(max_examples=25)
@given(places=cuts(7 * 2560 + 1000))
def test_the_readings_do_not_depend_on_how_the_stream_is_cut(places: list[int]) -> None:
    """In blocks == whole: values to 1e-9, and time, order, quality, cause and detail to the letter."""
    samples = noise(1, 4, 7 * 2560 + 1000)
    samples[0] += 9.8
    samples[1, 4 * 2560 + 7] = np.nan
    samples[2, 3 * 2560 + 50 :] += 20.0
    samples[3, 2 * 2560 + 100 : 2 * 2560 + 500] = 0.0
    plans = [point(c, VELOCITY, acceleration(RATE_HZ)) for c in range(3)] + [point(3, SLOW_VELOCITY, frame_s=5.0)]
    wanted = measure(Bank(RATE_HZ, plans, 21.5), samples, RATE_HZ, [1])
    assert {reading.cause for reading in wanted} >= {None, Cause.NON_FINITE, Cause.DC_STEP, Cause.FLAT, Cause.CLIPPED}
    assert same(measure(Bank(RATE_HZ, plans, 21.5), samples, RATE_HZ, places), wanted)


@pytest.mark.parametrize("band", [VELOCITY, SLOW_VELOCITY], ids=["from 10 Hz", "from 2 Hz"])
def test_an_offset_at_the_start_spoils_no_good_reading(band: Band) -> None:
    """With 1 g of offset no good reading is off by 2 % or more, and none is good while the filter settles."""
    frame_s = 10 / band.lower_hz
    frame_s = max(1.0, frame_s)
    base = vibration(RATE_HZ, 4 * frame_s, 25.0, 1.0)
    bank = Bank(RATE_HZ, [point(0, band, frame_s=frame_s), point(1, band, frame_s=frame_s)], None)
    readings = measure(bank, np.stack([base, base + STANDARD_GRAVITY]), RATE_HZ)
    for channel in range(2):
        assert causes(readings, channel) == ["settling", "good", "good", "good"]
        np.testing.assert_allclose(good(readings, channel, RMS), 1.0, rtol=0.005)


@pytest.mark.parametrize("frequency_hz", [16.0, 25.0])
@pytest.mark.parametrize("velocity_mm_s", [1.0, 5.0])
def test_a_step_anywhere_in_a_frame_spoils_no_good_reading(frequency_hz: float, velocity_mm_s: float) -> None:
    """With steps from 2 mg to 0.2 g at 40 places in a frame no good reading is off by 2 % or more."""
    base = vibration(RATE_HZ, 7, frequency_hz, velocity_mm_s)
    after = np.arange(base.size) >= np.linspace(3 * 2560, 4 * 2560, 40, endpoint=False).astype(int)[:, None]
    for height in (0.2, 0.05, 0.01, 0.008, 0.005, 0.002):
        samples = base + after * height * STANDARD_GRAVITY
        readings = measure(Bank(RATE_HZ, [point(c, VELOCITY) for c in range(40)], None), samples, RATE_HZ)
        for channel in range(40):
            np.testing.assert_allclose(good(readings, channel, RMS) / velocity_mm_s, 1.0, rtol=0.02)
            assert select(readings, channel, RMS)[-1].quality is Quality.GOOD


def test_a_step_of_0_2_g_is_named_and_the_filter_settles_anew() -> None:
    """The frame of the step is bad and shows no value; the next one settles where the step came late."""
    samples = np.stack([vibration(RATE_HZ, 6, 25.0, 1.0)] * 2)
    samples[0, 2 * 2560 + 800 :] += 0.2 * STANDARD_GRAVITY
    samples[1, 2 * 2560 + 2000 :] += 0.2 * STANDARD_GRAVITY
    readings = measure(Bank(RATE_HZ, [point(0, VELOCITY), point(1, VELOCITY)], None), samples, RATE_HZ)
    assert causes(readings, 0) == ["settling", "good", "dc_step", "good", "good", "good"]
    assert causes(readings, 1) == ["settling", "good", "dc_step", "settling", "good", "good"]
    bad = select(readings, 0, RMS)[2]
    assert bad.quality is Quality.BAD
    assert math.isnan(bad.value)
    assert bad.detail is not None
    assert "m/s2" in bad.detail


def test_a_gap_is_told_with_its_span_and_the_filter_settles_anew() -> None:
    """Behind 3.4 s of signal a gap of 2.5 s reads "no samples" for 2.9 s; the next stream begins by settling."""
    bank = Bank(RATE_HZ, [point(0, VELOCITY, acceleration(RATE_HZ))], None)
    samples = vibration(RATE_HZ, 4, 25.0, 1.0)[None]
    before = measure(bank, samples[:, : round(3.4 * RATE_HZ)], RATE_HZ, end=False)
    resumed_ns = START_NS + round(5.9 * SECOND_NS)
    lost = bank.reset(2.5, resumed_ns)
    after = measure(bank, samples + 5.0, RATE_HZ, start_ns=resumed_ns)
    assert causes(before + lost, 0) == ["settling", "good", "good", "no_samples"]
    for measured in (RMS, G_RMS, PEAK, CREST):
        last = select(lost, 0, measured)[-1]
        assert (last.quality, last.cause, last.time_ns) == (Quality.BAD, Cause.NO_SAMPLES, resumed_ns)
        assert last.span_s == pytest.approx(2.9)
        assert math.isnan(last.value)
    assert causes(after, 0) == ["settling", "good", "good", "good"]
    np.testing.assert_allclose(good(after, 0, RMS), 1.0, rtol=0.005)
    assert after[0].time_ns == resumed_ns + SECOND_NS


def test_the_end_of_a_stream_names_the_frame_that_was_not_whole() -> None:
    """Without a loss behind it the rest is "incomplete", with its own span; whole frames are not told twice."""
    readings = measure(Bank(RATE_HZ, [point(0, VELOCITY)], None), noise(2, 1, round(2.25 * RATE_HZ)), RATE_HZ)
    assert causes(readings, 0) == ["settling", "good", "incomplete"]
    assert readings[-1].span_s == pytest.approx(0.25)


def test_a_bank_without_a_stream_has_nothing_to_end() -> None:
    """Before the first block and after an end there is nothing to tell, unless something is missing."""
    bank = Bank(RATE_HZ, [point(0, VELOCITY)], None)
    assert bank.reset(0, START_NS) == []
    measure(bank, noise(3, 1, 2560), RATE_HZ)
    assert bank.reset(0, START_NS + SECOND_NS) == []
    assert causes(bank.reset(7.5, START_NS + 9 * SECOND_NS), 0) == ["no_samples"]


@pytest.mark.parametrize(("spoilt", "cause"), [(math.nan, "non_finite"), (math.inf, "non_finite"), (0.0, "flat")])
def test_a_bad_frame_is_followed_by_settling_and_others_are_not_touched(spoilt: float, cause: str) -> None:
    """Lost values or a signal that stands still cost that frame and the next; the other channels read the same bits."""
    samples = noise(4, 3, 6 * 2560) + 3.0
    plans = [point(c, VELOCITY, acceleration(RATE_HZ)) for c in range(3)]
    wanted = measure(Bank(RATE_HZ, plans, None), samples, RATE_HZ)
    damaged = samples.copy()
    damaged[1, 2 * 2560 + 1000 : 2 * 2560 + 1400] = spoilt
    readings = measure(Bank(RATE_HZ, plans, None), damaged, RATE_HZ)
    for measured in (RMS, G_RMS, PEAK, CREST):
        assert causes(readings, 1, measured) == ["settling", "good", cause, "settling", "good", "good"]
        bad = select(readings, 1, measured)[2]
        assert bad.quality is Quality.BAD
        assert math.isnan(bad.value)
        for channel in (0, 2):
            assert select(readings, channel, measured) == select(wanted, channel, measured)
    # What was filtered before the fault is forgotten, so that the values behind it are those of the signal alone.
    np.testing.assert_allclose(good(readings, 1, RMS)[1:], good(wanted, 1, RMS)[3:], rtol=1e-5)


@pytest.mark.parametrize(("hits", "quality"), [(2, Quality.UNCERTAIN), (3, Quality.BAD)])
def test_a_clipped_frame_keeps_its_value(hits: int, quality: Quality) -> None:
    """Below 0.01 % of clipped samples the reading is uncertain, else bad; its value is a lower bound and stays."""
    rate_hz = 25_600.0
    samples = vibration(rate_hz, 3, 25.0, 5.0)[None].copy()
    samples[0, 40_000 : 40_000 + hits] = 50.0
    readings = measure(Bank(rate_hz, [point(0, VELOCITY)], 50.0), samples, rate_hz)
    assert causes(readings, 0) == ["settling", "clipped", "good"]
    clipped = select(readings, 0, RMS)[1]
    assert clipped.quality is quality
    assert clipped.value == pytest.approx(5.0, rel=0.2)
    assert clipped.detail is not None
    assert clipped.detail.startswith(f"{hits} of 25600 samples")


def test_readings_of_two_frame_lengths_come_in_order_of_time() -> None:
    """A bank with frames of 1 s and 5 s tells them in order of time, over all its calls."""
    plans = [point(0, VELOCITY), point(1, SLOW_VELOCITY, frame_s=5.0)]
    bank = Bank(RATE_HZ, plans, None)
    readings: list[Reading] = []
    at = 0
    for part in parts(noise(5, 2, 17 * 2560), range(777, 17 * 2560, 777)):
        readings += bank.feed(block(part, RATE_HZ, START_NS + round(at * 1e9 / RATE_HZ)))
        at += part.shape[1]
    readings += bank.reset(1.0, START_NS + 18 * SECOND_NS)
    ends = [(reading.time_ns - START_NS) / SECOND_NS for reading in readings]
    assert ends == sorted(ends)
    assert [(r.time_ns - START_NS) / SECOND_NS for r in select(readings, 1, RMS)] == [5, 10, 15, 18]
    assert len(select(readings, 0, RMS)) == 18


def test_bands_that_the_rate_cannot_carry_are_all_named() -> None:
    """Every such band of every point is one problem, with its path in the configuration and the highest edge."""
    with pytest.raises(ConfigError) as refused:
        Bank(2000.0, [point(0, VELOCITY), point(1, VELOCITY, Band(Quantity.ACCELERATION, 500.0, 16000.0))], None)
    paths = [problem.split(":")[0] for problem in refused.value.problems]
    assert paths == [
        "machines.m.points.0.velocity.band_hz",
        "machines.m.points.1.velocity.band_hz",
        "machines.m.points.1.acceleration.band_hz",
    ]
    assert all("781.2" in problem for problem in refused.value.problems)


def test_a_dead_channel_leaves_the_filters_at_rest(monkeypatch: pytest.MonkeyPatch) -> None:
    """
    From the frame of a dead sensor on, what enters its filters and their state are exact zeros.

    A rest that decays would pass through subnormal numbers, which make a processor many times slower.
    """
    entered: list[NDArray[np.float64]] = []
    filtering = signal.sosfilt

    def watched(
        sos: NDArray[np.float64], x: NDArray[np.float64], axis: int, zi: NDArray[np.float64]
    ) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        entered.append(np.concatenate([x[0], zi[:, 0].ravel()]))
        output, state = filtering(sos, x, axis=axis, zi=zi)
        return np.asarray(output), np.asarray(state)

    monkeypatch.setattr("humbell.measures.bandpass.signal.sosfilt", watched)
    rate_hz = 12_800.0
    samples = np.zeros((1, round(5 * rate_hz)))
    samples[0, : round(2.5 * rate_hz)] = noise(6, round(2.5 * rate_hz))
    readings = measure(Bank(rate_hz, [point(0, VELOCITY, acceleration(rate_hz))], None), samples, rate_hz)
    assert causes(readings, 0) == ["settling", "good", "flat", "flat", "flat"]
    assert len(entered) == 2 * 5
    assert all(values.any() for values in entered[:4])
    assert not any(values.any() for values in entered[4:])
