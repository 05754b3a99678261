"""Measured machines: the overalls of every record against a calculation of its own with the analogue response."""

import csv
import math
from collections import Counter
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from functools import lru_cache
from pathlib import Path

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy import fft

from humbell.measures import Band, BandPlan, Bank, PointPlan, analogue
from humbell.model import (
    STANDARD_GRAVITY,
    Block,
    Cause,
    ConfigError,
    Measure,
    PointId,
    Quality,
    Reading,
    SampleUnit,
)
from signals import VELOCITY, acceleration, parts

pytestmark = pytest.mark.records

# The sets' own READMEs say where they come from; MANIFEST.csv lists the same files.
STREAMS = {
    "cwru": ("B014_1", "IR007_0", "IR014_1", "OR007at6_0", "OR014at6_1", "normal_0_a"),
    "mfpt": (
        "InnerRaceFault_vload_1",
        "InnerRaceFault_vload_3",
        "InnerRaceFault_vload_7",
        "OuterRaceFault_vload_2",
        "OuterRaceFault_vload_7",
    ),
    "uestc": ("I_1000", "I_1400_clip", "N_1400", "N_800", "O_1000"),
}
PIECES = {"pronostia": ("Bearing1_4", "Bearing2_1_gap", "Bearing2_2", "Bearing2_7")}
TOO_SLOW = {"motor_phone": ("Motor1_Healthy_PowerUp_Yaxis_50Hz", "Motor1_Healthy_Yaxis_20Hz")}
HEALTHY = ("cwru/normal_0_a", "uestc/N_1400", "uestc/N_800")
CLIPPED = "uestc/I_1400_clip"
# m/s² for one unit. The sensitivity of uestc, 100.22 mV/g, is in its README.
GAIN = {"g": STANDARD_GRAVITY, "V": STANDARD_GRAVITY / 0.10022, "m/s2": 1.0}
SCALE = {Measure.VELOCITY_RMS: 1000.0, Measure.ACCELERATION_RMS: 1 / STANDARD_GRAVITY}
P95 = {Measure.VELOCITY_RMS: 0.01, Measure.ACCELERATION_RMS: 0.01}
P95_NEAR_NYQUIST = 0.03  # of the acceleration, where the upper edge is as high as the rate can carry


def names(sets: Mapping[str, Sequence[str]]) -> list[str]:
    return [f"{folder}/{name}" for folder, files in sets.items() for name in files]


@dataclass(frozen=True, slots=True, eq=False)
class Record:
    """
    One file.

    Args:
        samples: (channels, n) or (pieces, channels, n).

        rate_hz: samples a second.

        unit: of the samples.
    """

    samples: NDArray[np.float32]
    rate_hz: float
    unit: str

    @property
    def plans(self) -> list[PointPlan]:
        """Both overalls of every channel."""
        bands = (BandPlan(VELOCITY, 1.0), BandPlan(acceleration(self.rate_hz), 1.0))
        channels = self.samples.shape[-2]
        return [PointPlan(PointId("m", str(c)), c, GAIN[self.unit], bands) for c in range(channels)]

    @property
    def limits(self) -> dict[Measure, float]:
        """What the 95th percentile of the error may be."""
        near = acceleration(self.rate_hz).upper_hz < 16_000
        return P95 | ({Measure.ACCELERATION_RMS: P95_NEAR_NYQUIST} if near else {})

    def block(self, samples: NDArray[np.float32], start_ns: int, *, piece: bool = False) -> Block:
        """Return one block."""
        return Block("tape", "boot", 0, start_ns, self.rate_hz, SampleUnit(self.unit), samples, piece)


def load(path: Path) -> Record:
    """Read a file without the code that is tested."""
    with np.load(path) as file:
        samples = file["x"]
        return Record(np.atleast_2d(samples), float(file["fs"]), str(file["unit"]))


def play(record: Record, full_scale: float | None = None) -> list[Reading]:
    """Return the readings of a stream that comes in quarter seconds, or of all pieces."""
    bank = Bank(record.rate_hz, record.plans, full_scale)
    if record.samples.ndim == 3:
        pieces = (record.block(x, i * 10**10, piece=True) for i, x in enumerate(record.samples))
        return [reading for piece in pieces for reading in bank.feed(piece)]
    readings: list[Reading] = []
    at, length, step = 0, record.samples.shape[1], round(record.rate_hz / 4)
    for part in parts(record.samples, range(step, length, step)):
        readings += bank.feed(record.block(np.asarray(part, np.float32), round(at * 1e9 / record.rate_hz)))
        at += part.shape[1]
    return readings + bank.reset(0, round(length * 1e9 / record.rate_hz))


def reference_stream(record: Record, channel: int, band: Band) -> NDArray[np.float64]:
    """
    Return a channel, (n,), as the analogue filter would have passed it from its first sample on.

    By one FFT with 4 s of zeros behind, time for the filter to die away, times the complex response.
    """
    samples = record.samples[channel].astype(np.float64)
    padded = fft.next_fast_len(samples.size + round(4 * record.rate_hz), real=True)
    spectrum = np.fft.rfft((samples - samples[0]) * GAIN[record.unit], padded)
    response = analogue(band, np.arange(padded // 2 + 1) * record.rate_hz / padded)
    return np.fft.irfft(spectrum * response, padded)[: samples.size]


def reference_pieces(record: Record, band: Band) -> NDArray[np.float64]:
    """
    Return the RMS in the band, (pieces, channels).

    By the mean square of the Hann-windowed spectrum times the squared response, both sides of it.
    """
    samples = record.samples.astype(np.float64) * GAIN[record.unit]
    length = samples.shape[-1]
    window = np.sin(np.pi * np.arange(length) / length) ** 2
    spectrum = np.fft.fft((samples - samples.mean(axis=-1, keepdims=True)) * window)
    response = analogue(band, np.abs(np.fft.fftfreq(length, 1 / record.rate_hz)))
    return np.asarray(np.sqrt(np.sum(np.abs(spectrum * response) ** 2, axis=-1) / (length * np.sum(window**2))))


def band_of(record: Record, measured: Measure) -> Band:
    return VELOCITY if measured is Measure.VELOCITY_RMS else acceleration(record.rate_hz)


@lru_cache(maxsize=32)  # all files: the figures at the end are of what the tests before them measured
def measured_of(path: Path) -> tuple[list[Reading], dict[Measure, NDArray[np.float64]]]:
    """Return all readings of a stream, and the relative errors of the good ones of both overalls."""
    record = load(path)
    readings = play(record)
    errors: dict[Measure, list[float]] = {Measure.VELOCITY_RMS: [], Measure.ACCELERATION_RMS: []}
    for channel in range(len(record.samples)):
        for measured, found in errors.items():
            wave = reference_stream(record, channel, band_of(record, measured))
            for reading in readings:
                if (reading.point, reading.measure, reading.quality) != (str(channel), measured, Quality.GOOD):
                    continue
                end_s = round(reading.time_ns / 1e9)
                frame = wave[round((end_s - 1) * record.rate_hz) : round(end_s * record.rate_hz)]
                found.append(abs(reading.value / (np.sqrt(np.mean(frame**2)) * SCALE[measured]) - 1))
    return readings, {measured: np.array(found) for measured, found in errors.items()}


@lru_cache(maxsize=32)
def measured_pieces_of(path: Path) -> tuple[list[Reading], dict[Measure, NDArray[np.float64]]]:
    """Return all readings of a file of pieces, and the relative errors of all that show a value."""
    record = load(path)
    readings = play(record)
    errors: dict[Measure, list[float]] = {Measure.VELOCITY_RMS: [], Measure.ACCELERATION_RMS: []}
    for measured, found in errors.items():
        wanted = reference_pieces(record, band_of(record, measured)) * SCALE[measured]
        for reading in readings:
            if reading.measure is measured and math.isfinite(reading.value):
                found.append(abs(reading.value / wanted[reading.time_ns // 10**10, int(reading.point)] - 1))
    return readings, {measured: np.array(found) for measured, found in errors.items()}


def p95(errors: NDArray[np.float64]) -> float:
    return float(np.quantile(errors, 0.95))


def bad(readings: Sequence[Reading]) -> set[Cause | None]:
    return {reading.cause for reading in readings if reading.quality is Quality.BAD}


def test_every_file_of_the_folder_is_in_one_of_these_tests(records: Path) -> None:
    """The files that the manifest lists are the files named here."""
    with (records / "MANIFEST.csv").open() as manifest:
        listed = {row["file"] for row in csv.DictReader(manifest)}
    assert listed == {f"{name}.npz" for sets in (STREAMS, PIECES, TOO_SLOW) for name in names(sets)}


@pytest.mark.parametrize("name", names(STREAMS))
def test_both_overalls_of_a_stream_are_those_of_the_analogue_response(records: Path, name: str) -> None:
    """
    Frame by frame the good readings agree with one FFT of the whole record times the analogue response.

    The 95th percentile of the relative error is at most 1 %; 3 % for the acceleration where the upper edge is as high
    as the rate can carry.
    """
    path = records / f"{name}.npz"
    record = load(path)
    _, errors = measured_of(path)
    for measured, limit in record.limits.items():
        assert errors[measured].size >= len(record.samples)
        assert p95(errors[measured]) <= limit


@pytest.mark.parametrize("name", names(STREAMS))
def test_a_stream_is_not_blamed_for_what_it_does_not_have(records: Path, name: str) -> None:
    """No record is called flat, lost or stepped; only the frame at its end is incomplete, and only one is clipped."""
    readings, _ = measured_of(records / f"{name}.npz")
    allowed = {Cause.INCOMPLETE, Cause.CLIPPED} if name == CLIPPED else {Cause.INCOMPLETE}
    assert bad(readings) <= allowed


@pytest.mark.parametrize("name", HEALTHY)
def test_a_healthy_record_is_good_from_the_second_frame_to_the_last_whole_one(records: Path, name: str) -> None:
    """A healthy machine's readings are good but for the frame that settles and the one that the end cuts short."""
    path = records / f"{name}.npz"
    readings, _ = measured_of(path)
    per_channel = [reading for reading in readings if reading.measure is Measure.VELOCITY_RMS and reading.point == "0"]
    causes = [reading.cause for reading in per_channel]
    whole = int(load(path).samples.shape[1] / load(path).rate_hz)
    assert causes[:whole] == [Cause.SETTLING] + [None] * (whole - 1)
    assert set(causes[whole:]) <= {Cause.INCOMPLETE}


@pytest.mark.parametrize("name", names(STREAMS))
def test_a_record_played_in_a_loop_is_not_called_clipped(records: Path, name: str) -> None:
    """Three rounds of a record repeat its extremes; only the one with samples at the converter's rail is clipped."""
    record = load(records / f"{name}.npz")
    looped = Record(np.tile(record.samples, 3), record.rate_hz, record.unit)
    assert (Cause.CLIPPED in {reading.cause for reading in play(looped)}) == (name == CLIPPED)


def test_the_samples_at_a_real_converters_rail_are_found_known_or_not(records: Path) -> None:
    """
    The clipped record has 13 samples at its rail, +9.99900 V, as its README tells.

    With the full scale known all are counted but those in the frame that settles and the one that the end cuts short;
    unknown, all from the frame of the third one on.
    """
    record = load(records / f"{CLIPPED}.npz")
    (at_rail,) = np.nonzero(record.samples[0] == record.samples.max())
    seconds = (at_rail / record.rate_hz).astype(int)
    assert at_rail.size == 13
    for full_scale, first in ((9.999, 1), (None, max(1, int(seconds[2])))):
        readings = play(record, full_scale)
        shown = [r for r in readings if r.cause is Cause.CLIPPED and r.measure is Measure.VELOCITY_RMS]
        counted = {round(r.time_ns / 1e9) - 1: int((r.detail or "0").split()[0]) for r in shown}
        assert counted == Counter(second for second in seconds.tolist() if first <= second < 13)


@pytest.mark.parametrize("name", names(PIECES))
def test_both_overalls_of_pieces_are_those_of_their_windowed_spectrum(records: Path, name: str) -> None:
    """
    Every piece agrees with a windowed FFT times the analogue response to a millionth.

    0.1 s carry no band from 10 Hz, so that every velocity is uncertain and none is hidden; the acceleration is good,
    but where the converter ended; a standstill is no dead sensor.
    """
    readings, errors = measured_pieces_of(records / f"{name}.npz")
    for found in errors.values():
        assert found.size == len(readings) / 4
        assert found.max() <= 1e-6
    velocity = [reading for reading in readings if reading.measure is Measure.VELOCITY_RMS]
    assert all(reading.quality is not Quality.GOOD for reading in velocity)
    assert {reading.cause for reading in readings} <= {None, Cause.SHORT_PIECE, Cause.CLIPPED}
    assert (Cause.CLIPPED in bad(readings)) == (name == "pronostia/Bearing1_4")
    short = next(reading for reading in velocity if reading.cause is Cause.SHORT_PIECE)
    assert short.detail == "0.1 s carry a band from 100 Hz, not from 10 Hz"


@pytest.mark.parametrize(("name", "edge"), list(zip(names(TOO_SLOW), ["38.7", "38.9"], strict=True)))
def test_a_record_that_is_sampled_too_slowly_is_refused_with_the_highest_edge(
    records: Path, name: str, edge: str
) -> None:
    """99 samples a second carry neither band: the messages name the edge that they could carry."""
    record = load(records / f"{name}.npz")
    plans = [PointPlan(p.id, p.channel, p.gain, (BandPlan(VELOCITY, 1.0),)) for p in record.plans]
    with pytest.raises(ConfigError) as refused:
        Bank(record.rate_hz, plans, None)
    assert len(refused.value.problems) == 3
    assert all(f"carries a band up to {edge} Hz" in problem for problem in refused.value.problems)


@pytest.mark.parametrize("folder", [*STREAMS, *PIECES])
def test_the_worst_errors_of_each_set_are_shown(records: Path, figure: Callable[[str, str], None], folder: str) -> None:
    """The figure names the worst 95th percentile of each set."""
    measure_file = measured_of if folder in STREAMS else measured_pieces_of
    files = (STREAMS | PIECES)[folder]
    errors = [measure_file(records / folder / f"{name}.npz")[1] for name in files]
    worst = {measured: max(p95(found[measured]) for found in errors) for measured in SCALE}
    count = sum(found[Measure.VELOCITY_RMS].size for found in errors)
    figure(
        f"{folder}: worst p95 error of {len(files)} files",
        f"velocity {worst[Measure.VELOCITY_RMS]:.2%}, acceleration {worst[Measure.ACCELERATION_RMS]:.2%}"
        f" ({count} readings each)",
    )
    assert max(worst.values()) <= P95_NEAR_NYQUIST
