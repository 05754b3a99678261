"""WAV files, against the standard library's `wave`, against scipy, and against damage."""

import struct
import sys
import wave
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy.io import wavfile

from humbell.model import ConfigError, InputError, SampleUnit
from humbell.sources import ReplaySettings
from humbell.sources.wav import WavFile

COUNTS = ReplaySettings(kind="replay", unit=SampleUnit.COUNTS)
VOLTS = ReplaySettings(kind="replay", unit=SampleUnit.VOLT, full_scale=10.0)


def pcm(path: Path, counts: NDArray[np.int64], bits: int, rate_hz: int = 8000) -> Path:
    """Write (channels, n) counts with the standard library."""
    size = bits // 8
    stored = counts + 128 if bits == 8 else counts
    with wave.open(str(path), "wb") as file:
        file.setparams((len(counts), size, rate_hz, 0, "NONE", "not compressed"))
        file.writeframes(b"".join(int(v).to_bytes(size, "little", signed=bits > 8) for v in stored.T.ravel()))
    return path


def ramp(bits: int, channels: int = 2, length: int = 50) -> NDArray[np.int64]:
    """Return counts from rail to rail."""
    rail = 1 << (bits - 1)
    values = np.linspace(-rail, rail - 1, channels * length).round().astype(np.int64)
    return values.reshape(length, channels).T


def chunk(name: bytes, content: bytes) -> bytes:
    return name + struct.pack("<I", len(content)) + content + b"\0" * (len(content) % 2)


def bext(date: bytes, time: bytes) -> bytes:
    # EBU Tech 3285: Description 256, Originator 32, OriginatorReference 32, date 10, time 8, TimeReference 8, version 2.
    return chunk(b"bext", b"recorder".ljust(320, b"\0") + date + time + struct.pack("<QH", 12345, 1) + bytes(254))


def riff(*chunks: bytes, tail: bytes = b"") -> bytes:
    content = b"WAVE" + b"".join(chunks)
    return b"RIFF" + struct.pack("<I", len(content)) + content + tail


def fmt(tag: int = 1, channels: int = 1, rate_hz: int = 8000, bits: int = 16) -> bytes:
    align = channels * bits // 8
    return chunk(b"fmt ", struct.pack("<HHIIHH", tag, channels, rate_hz, rate_hz * align, align, bits))


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
    wav = WavFile(path, "tape", VOLTS)
    assert wav.header.length == frames
    assert not wav.load()(0, frames - 1000, frames).any()


def test_an_extensible_header_says_how_many_bits_the_converter_fills(tmp_path: Path) -> None:
    """With 24 valid bits of 32, full scale is the rail of 24 bits, else clipping would not show."""
    guid = struct.pack("<I", 1) + b"\x00\x00\x10\x00\x80\x00\x00\xaa\x00\x38\x9b\x71"
    form = struct.pack("<HHIIHHHHI", 0xFFFE, 1, 8000, 32000, 4, 32, 22, 24, 0) + guid
    rail = ((1 << 23) - 1) << 8
    path = tmp_path / "a.wav"
    path.write_bytes(riff(chunk(b"fmt ", form), chunk(b"data", struct.pack("<3i", 5, rail, -(1 << 31)))))
    file = WavFile(path, "tape", VOLTS)
    assert all_samples(file)[0, 1] == file.header.full_scale
    assert WavFile(path, "tape", COUNTS).header.full_scale == rail


def test_big_endian_and_64_bit_files_are_read_in_native_order(tmp_path: Path) -> None:
    """RIFX and RF64 files, which scipy reads, too, give the same counts in native byte order."""
    path = tmp_path / "a.wav"
    for bits, code in ((16, ">4h"), (24, None)):
        counts = [1, -2, 300, -400]
        data = struct.pack(code, *counts) if code else b"".join(c.to_bytes(3, "big", signed=True) for c in counts)
        align = bits // 8
        form = struct.pack(">HHIIHH", 1, 1, 8000, 8000 * align, align, bits)
        content = b"WAVEfmt " + struct.pack(">I", 16) + form + b"data" + struct.pack(">I", len(data)) + data
        path.write_bytes(b"RIFX" + struct.pack(">I", len(content)) + content)
        samples = all_samples(WavFile(path, "tape", COUNTS))
        assert samples.dtype.isnative
        assert samples.tolist() == [counts]
    content = b"WAVEds64" + struct.pack("<IQQQI", 28, 4 + 36 + 24 + 16, 8, 4, 0) + fmt()
    path.write_bytes(b"RF64\xff\xff\xff\xff" + content + b"data\xff\xff\xff\xff" + struct.pack("<4h", 1, -2, 3, -4))
    assert all_samples(WavFile(path, "tape", COUNTS)).tolist() == [[1, -2, 3, -4]]


@pytest.mark.parametrize("behind", [False, True])
def test_a_broadcast_waves_time_is_the_start_in_utc(tmp_path: Path, behind: bool) -> None:
    """OriginationDate and OriginationTime, which have no zone, are taken as UTC; before or behind the samples."""
    time, data = bext(b"2026-03-01", b"10:00:00"), chunk(b"data", bytes(8))
    path = tmp_path / "a.wav"
    path.write_bytes(riff(fmt(), data, time) if behind else riff(fmt(), time, data))
    # date -u -d '2026-03-01 10:00:00' +%s
    assert WavFile(path, "tape", COUNTS).header.start_ns == 1_772_359_200_000_000_000


@pytest.mark.parametrize(
    ("date", "time"),
    [
        (b"2026-13-01", b"10:00:00"),
        (b"2026-02-30", b"10:00:00"),
        (b"2026-03-01", b"24:00:00"),
        (b"0000-00-00", b"00:00:00"),
        (b"1969-12-31", b"10:00:00"),
        (bytes(10), bytes(8)),
        (b"\xff" * 10, b"\xff" * 8),
    ],
)
def test_a_broadcast_waves_time_that_cannot_be_is_no_time(tmp_path: Path, date: bytes, time: bytes) -> None:
    """A recorder without a clock writes zeros or nonsense: the samples are good all the same."""
    path = tmp_path / "a.wav"
    path.write_bytes(riff(fmt(), bext(date, time), chunk(b"data", bytes(8))))
    assert WavFile(path, "tape", COUNTS).header.start_ns is None


def test_chunks_that_are_not_known_are_passed_over(tmp_path: Path) -> None:
    """Chunks of other programs, odd lengths and a short rest behind the end do not matter, and nothing warns."""
    path = tmp_path / "a.wav"
    inside = (
        chunk(b"zzzz", b"odd"),
        fmt(),
        chunk(b"LIST", b""),
        chunk(b"data", bytes(8)),
        chunk(b"\0\xff\0\xff", b"x"),
    )
    path.write_bytes(riff(*inside, tail=b"rest"))
    assert WavFile(path, "tape", COUNTS).header.length == 4


@pytest.mark.parametrize(
    ("content", "says"),
    [
        (riff(fmt(), chunk(b"data", bytes(8)))[:-2], "is cut off, 2 bytes are missing"),
        (riff(fmt(), chunk(b"data", bytes(8)))[:30], "is cut off"),
        (riff(fmt())[:-1], "holds no samples, or no format"),
        (riff(chunk(b"data", bytes(8))), "holds no samples, or no format"),
        (riff(fmt(), chunk(b"data", b"")), "holds no samples"),
        (riff(fmt(), chunk(b"data", bytes(8)), chunk(b"data", bytes(8))), "two data chunks"),
        (riff(fmt(), *[chunk(b"zzzz", b"")] * 2000), "more than 1024 chunks"),
        (b"RIFF" + struct.pack("<I", 4) + riff(fmt(), chunk(b"data", bytes(8)))[8:], "shorter than its samples"),
        (b"RIFF\xff\xff\xff\xff" + riff(fmt(), chunk(b"data", bytes(8)))[8:], "is cut off"),
        (b"RF64\xff\xff\xff\xffWAVE" + fmt() + chunk(b"data", bytes(8)), "is cut off"),
        (riff(fmt(channels=0), chunk(b"data", bytes(8))), "do not fit its format"),
        (riff(fmt(channels=3), chunk(b"data", bytes(8))), "do not fit its format"),
        (riff(fmt(channels=65), chunk(b"data", bytes(130))), "65 channels, more than 64"),
        (riff(fmt(rate_hz=0), chunk(b"data", bytes(8))), "a rate of 0 Hz"),
        (riff(fmt(rate_hz=512001), chunk(b"data", bytes(8))), "a rate of 512001 Hz"),
        (riff(fmt(tag=7, bits=8), chunk(b"data", bytes(8))), "is compressed, format 0x0007"),
        (riff(fmt(bits=20), chunk(b"data", bytes(8))), "has samples of 20 bits"),
        (riff(fmt(tag=3, bits=16), chunk(b"data", bytes(8))), "has samples of 16 bits"),
        (riff(chunk(b"fmt ", bytes(4)), chunk(b"data", bytes(8))), "its header cannot be read"),
        (b"RIFFxxxxAVI " + bytes(50), "is no WAV file"),
        (b"RIFF", "its header cannot be read"),
        (b"", "is empty"),
        (b"time;value\n0;1\n", "is no WAV file"),
        (b"PK\x03\x04" + bytes(50), "an NPZ file: name it .npz"),
    ],
)
def test_what_is_wrong_with_a_file_is_said_in_one_line(tmp_path: Path, content: bytes, says: str) -> None:
    """A file that cannot be read is refused whole, with its name, what is wrong, and what to do."""
    path = tmp_path / "a.wav"
    path.write_bytes(content)
    with pytest.raises(InputError, match=says) as error:
        WavFile(path, "tape", VOLTS)
    assert str(error.value).startswith(f"{path}: ")
    assert str(error.value).endswith(")")
    assert "\n" not in str(error.value)


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


def test_the_test_machine_is_little_endian() -> None:
    """The files above are compared with native integers."""
    assert sys.byteorder == "little"
