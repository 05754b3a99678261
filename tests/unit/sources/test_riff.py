"""The frame of WAV files: chunks, formats, times, and what is wrong with one that cannot be read."""

import struct
from pathlib import Path
from typing import Any

import pytest
from numpy.typing import NDArray

from humbell.model import InputError, SampleUnit
from humbell.sources import ReplaySettings
from humbell.sources.wav import WavFile
from unit.sources.recorded import START_NS, bext, chunk, fmt, riff

COUNTS = ReplaySettings(kind="replay", unit=SampleUnit.COUNTS)
VOLTS = ReplaySettings(kind="replay", unit=SampleUnit.VOLT, full_scale=10.0)


def all_samples(file: WavFile) -> NDArray[Any]:
    return file.load()(0, 0, file.header.length)


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


@pytest.mark.parametrize("behind", [False, True])
def test_a_broadcast_waves_time_is_the_start_in_utc(tmp_path: Path, behind: bool) -> None:
    """OriginationDate and OriginationTime, which have no zone, are taken as UTC; before or behind the samples."""
    time, data = bext(b"2026-03-01", b"10:00:00"), chunk(b"data", bytes(8))
    path = tmp_path / "a.wav"
    path.write_bytes(riff(fmt(), data, time) if behind else riff(fmt(), time, data))
    assert WavFile(path, "tape", COUNTS).header.start_ns == START_NS


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
