"""The samples of WAV files, against the standard library's `wave` and against scipy."""

import struct
import tracemalloc
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy.io import wavfile

from humbell.model import ConfigError, InputError, SampleUnit
from humbell.sources import ReplaySettings
from humbell.sources.wav import WavFile
from unit.sources.recorded import fmt, pcm, ramp

COUNTS = ReplaySettings(kind="replay", unit=SampleUnit.COUNTS)
VOLTS = ReplaySettings(kind="replay", unit=SampleUnit.VOLT, full_scale=10.0)


def all_samples(file: WavFile) -> NDArray[Any]:
    return file.load()(0, 0, file.header.length)


@pytest.mark.parametrize(("bits", "dtype"), [(8, np.int16), (16, np.int16), (24, np.int32), (32, np.int32)])
def test_pcm_in_counts_gives_the_converters_integers(tmp_path: Path, bits: int, dtype: type) -> None:
    """
    The integers that the standard library wrote come back, of every size.

    24 bits are not shifted left, and 8 bits, which are stored from 0 to 255, are signed.
    """
    counts = ramp(bits)
    file = WavFile(pcm(tmp_path / "a.wav", counts, bits), "tape", COUNTS)
    assert all_samples(file).dtype == dtype
    np.testing.assert_array_equal(all_samples(file), counts)
    assert file.header.full_scale == (1 << (bits - 1)) - 1
    assert (file.header.channels, file.header.length, file.header.rate_hz) == (2, 50, 8000.0)


@pytest.mark.parametrize("bits", [8, 16, 24, 32])
def test_pcm_in_a_unit_is_scaled_to_full_scale(tmp_path: Path, bits: int) -> None:
    """A count is full_scale / 2^(bits - 1); both rails are at or beyond the block's full scale, no other count is."""
    counts = ramp(bits)
    file = WavFile(pcm(tmp_path / "a.wav", counts, bits), "tape", VOLTS)
    volts = all_samples(file)
    assert volts.dtype == np.float64
    np.testing.assert_allclose(volts, counts * 10.0 / 2 ** (bits - 1), rtol=1e-15)
    assert file.header.full_scale is not None
    clipped = np.abs(volts) >= file.header.full_scale
    np.testing.assert_array_equal(clipped, (counts >= counts.max()) | (counts <= -counts.max()))
    assert clipped[0, 0]
    assert clipped[-1, -1]


@pytest.mark.parametrize("bits", [16, 24, 32])
def test_samples_agree_with_scipys_reader(tmp_path: Path, bits: int) -> None:
    """Scipy reads the same values; 24 bits it leaves shifted left by 8."""
    path = pcm(tmp_path / "a.wav", ramp(bits), bits)
    _, expected = wavfile.read(path)
    np.testing.assert_array_equal(
        all_samples(WavFile(path, "tape", COUNTS)), np.asarray(expected).T >> (8 if bits == 24 else 0)
    )


@pytest.mark.parametrize("dtype", [np.float32, np.float64])
def test_float_samples_stay_as_they_are(tmp_path: Path, dtype: type) -> None:
    """Float samples are in the unit already, not scaled, and beyond 1 where they are; NaN is passed on."""
    values: NDArray[Any] = np.array([[0.5, -3.25, np.nan, 1e6], [1.0, -1.0, 0.0, np.inf]], dtype)
    wavfile.write(tmp_path / "a.wav", 51200, values.T)
    file = WavFile(tmp_path / "a.wav", "tape", VOLTS)
    assert all_samples(file).dtype == dtype
    np.testing.assert_array_equal(all_samples(file), values)
    assert file.header.full_scale == 10.0


def test_a_part_is_the_same_as_that_part_of_the_whole(tmp_path: Path) -> None:
    """Samples may be asked for in any order, of every size of sample."""
    for bits in (8, 16, 24, 32):
        file = WavFile(pcm(tmp_path / f"{bits}.wav", ramp(bits, 3), bits), "tape", VOLTS)
        cut = file.load()
        np.testing.assert_array_equal(cut(0, 20, 31), all_samples(file)[:, 20:31])


def test_samples_cannot_be_written_to(tmp_path: Path) -> None:
    """What a source hands over is read-only, so that no stage changes what another one reads."""
    for bits in (8, 16, 24):
        for settings in (COUNTS, VOLTS):
            path = pcm(tmp_path / "a.wav", ramp(bits), bits)
            assert not all_samples(WavFile(path, "tape", settings)).flags.writeable


def test_opening_a_long_24_bit_file_reads_none_of_its_samples(tmp_path: Path) -> None:
    """
    Samples stay on the disk until they are asked for, also those of 24 bits, which scipy cannot map.

    The file is sparse: an hour of four channels at 51.2 kHz (2.2 GB) would not fit into a small computer's memory.
    """
    frames = 3600 * 51200
    size = frames * 4 * 3
    path = tmp_path / "a.wav"
    with path.open("wb") as file:
        file.write(b"RIFF" + struct.pack("<I", size + 36) + b"WAVE" + fmt(1, 4, 51200, 24))
        file.write(b"data" + struct.pack("<I", size))
        file.truncate(44 + size)
    tracemalloc.start()
    wav = WavFile(path, "tape", VOLTS)
    assert not wav.load()(0, frames - 1000, frames).any()
    peak_bytes = tracemalloc.get_traced_memory()[1]
    tracemalloc.stop()
    assert wav.header.length == frames
    assert peak_bytes < 1 << 20


def test_a_file_that_was_cut_off_later_is_refused_when_it_is_played(tmp_path: Path) -> None:
    """Between the check and the play a file may change; it is still one clear line."""
    for bits in (16, 24):
        path = pcm(tmp_path / "a.wav", ramp(bits), bits)
        file = WavFile(path, "tape", COUNTS)
        path.write_bytes(path.read_bytes()[:50])
        with pytest.raises(InputError, match="cannot be read"):
            file.load()


@pytest.mark.parametrize(
    ("settings", "names"),
    [
        (ReplaySettings(kind="replay"), ["sources.tape.unit", "sources.tape.full_scale"]),
        (ReplaySettings(kind="replay", full_scale=10.0), ["sources.tape.unit"]),
        (ReplaySettings(kind="replay", unit=SampleUnit.G), ["sources.tape.full_scale", "in g"]),
    ],
)
def test_what_a_wav_file_leaves_open_must_stand_in_the_settings(
    tmp_path: Path, settings: ReplaySettings, names: list[str]
) -> None:
    """Without a unit, and for PCM in any unit but counts a full scale, the settings to write are named."""
    with pytest.raises(ConfigError) as error:
        WavFile(pcm(tmp_path / "a.wav", ramp(16), 16), "tape", settings)
    assert all(name in str(error.value) for name in names)
    assert len(error.value.problems) == 1


def test_a_known_full_scale_in_counts_makes_clipping_visible(tmp_path: Path) -> None:
    """A converter whose range ends before the file's is believed; one that claims more than the file holds is not."""
    path = pcm(tmp_path / "a.wav", ramp(16), 16)
    for full_scale, expected in ((30000.0, 30000.0), (1e6, 32767.0)):
        settings = ReplaySettings(kind="replay", unit=SampleUnit.COUNTS, full_scale=full_scale)
        assert WavFile(path, "tape", settings).header.full_scale == expected


def test_the_expected_rate_is_held_against_the_files(tmp_path: Path) -> None:
    """A file with another rate than the expected one is refused, with both rates and the setting."""
    path = pcm(tmp_path / "a.wav", ramp(16), 16, rate_hz=48000)
    WavFile(path, "tape", COUNTS.model_copy(update={"rate_hz": 48000.0}))
    with pytest.raises(InputError, match=r"48000 Hz, not 51200 Hz .*sources\.tape\.rate_hz"):
        WavFile(path, "tape", COUNTS.model_copy(update={"rate_hz": 51200.0}))
