"""NPZ files: what they may hold."""

from pathlib import Path
from typing import Any

import numpy as np
import pytest
from numpy.typing import NDArray

from humbell.model import InputError, SampleUnit
from humbell.sources import ReplaySettings
from humbell.sources.npz import NpzFile
from unit.sources.recorded import START_NS, npz

SETTINGS = ReplaySettings(kind="replay")


def all_samples(file: NpzFile) -> NDArray[Any]:
    return file.load()(0, 0, file.header.length)


@pytest.mark.parametrize("dtype", ["float64", "float32", "int32", "int16", ">f8", ">f4", ">i4", ">i2"])
def test_common_types_of_samples_stay_what_they_are(tmp_path: Path, dtype: str) -> None:
    """float64, float32, int32 and int16 are kept, in native byte order."""
    values = np.arange(12).reshape(2, 6).astype(dtype)
    samples = all_samples(NpzFile(npz(tmp_path / "a.npz", values), "tape", SETTINGS))
    assert samples.dtype == np.dtype(dtype).newbyteorder("=")
    assert samples.dtype.isnative
    np.testing.assert_array_equal(samples, values)
    assert not samples.flags.writeable


@pytest.mark.parametrize("dtype", ["int8", "uint8", "uint16", "uint32", "int64", "uint64", "float16", "longdouble"])
def test_other_real_types_become_float64(tmp_path: Path, dtype: str) -> None:
    """Rarer types are converted, so that later stages know four types only."""
    values = np.arange(12).reshape(2, 6).astype(dtype)
    samples = all_samples(NpzFile(npz(tmp_path / "a.npz", values), "tape", SETTINGS))
    assert samples.dtype == np.float64
    np.testing.assert_array_equal(samples, values)


def test_the_shape_says_channels_and_pieces(tmp_path: Path) -> None:
    """(n,) is one channel, (channels, n) a stream, (pieces, channels, n) pieces; Fortran order makes no difference."""
    for shape, pieces, channels, length in (
        ((7,), 0, 1, 7),
        ((3, 7), 0, 3, 7),
        ((5, 3, 7), 5, 3, 7),
        ((1, 1, 1), 1, 1, 1),
    ):
        values = np.arange(np.prod(shape)).reshape(shape)
        file = NpzFile(npz(tmp_path / "a.npz", np.asfortranarray(values)), "tape", SETTINGS)
        header = file.header
        assert (header.pieces, header.channels, header.length) == (pieces, channels, length)
        cut = file.load()
        whole = np.array([cut(piece, 0, length) for piece in range(max(pieces, 1))])
        np.testing.assert_array_equal(whole.reshape(shape), values)


def test_values_that_are_not_finite_are_passed_on(tmp_path: Path) -> None:
    """NaN and infinite samples are for the sensor check to judge, not for the reader."""
    values = np.array([1.0, np.nan, -np.inf])
    np.testing.assert_array_equal(all_samples(NpzFile(npz(tmp_path / "a.npz", values), "tape", SETTINGS))[0], values)


def test_compressed_files_are_read(tmp_path: Path) -> None:
    """savez_compressed gives the same samples as savez."""
    values = np.arange(1000.0)
    np.savez_compressed(tmp_path / "a.npz", x=values, fs=np.float32(48828.125), unit=np.array(["m/s2"]))
    file = NpzFile(tmp_path / "a.npz", "tape", SETTINGS)
    np.testing.assert_array_equal(all_samples(file)[0], values)
    assert (file.header.rate_hz, file.header.unit) == (48828.125, SampleUnit.METRES_PER_SECOND_SQUARED)


@pytest.mark.parametrize("unit", ["g", "m/s2", "V", "counts", b"g"])
def test_the_unit_is_the_files_and_full_scale_the_settings(tmp_path: Path, unit: str | bytes) -> None:
    """Text and bytes both name a unit; NPZ files carry no full scale of their own."""
    settings = ReplaySettings(kind="replay", full_scale=50.0)
    header = NpzFile(npz(tmp_path / "a.npz", [1, 2], unit=unit), "tape", settings).header
    assert header.unit == (unit if isinstance(unit, str) else unit.decode())
    assert header.full_scale == 50.0


def test_the_settings_unit_stands_in_or_must_agree(tmp_path: Path) -> None:
    """Where the file has no unit the settings' counts; where both are given they must be the same."""
    volts = ReplaySettings(kind="replay", unit=SampleUnit.VOLT)
    assert NpzFile(npz(tmp_path / "a.npz", [1, 2], unit=None), "tape", volts).header.unit == "V"
    assert NpzFile(npz(tmp_path / "b.npz", [1, 2], unit="V"), "tape", volts).header.unit == "V"
    with pytest.raises(InputError, match="is in g, the settings say V"):
        NpzFile(npz(tmp_path / "c.npz", [1, 2], unit="g"), "tape", volts)


def test_times_in_the_file_are_utc_nanoseconds(tmp_path: Path) -> None:
    """start_ns is the first sample's time, piece_start_ns that of each piece; int64 keeps every nanosecond."""
    assert NpzFile(npz(tmp_path / "a.npz", [1, 2]), "tape", SETTINGS).header.start_ns is None
    stream = NpzFile(npz(tmp_path / "b.npz", [1, 2], start_ns=START_NS + 1), "tape", SETTINGS)
    assert stream.header.start_ns == START_NS + 1
    starts = [START_NS, START_NS + 600_000_000_001]
    pieces = NpzFile(npz(tmp_path / "c.npz", np.ones((2, 1, 4)), piece_start_ns=starts), "tape", SETTINGS)
    assert pieces.header.start_ns == START_NS
    assert pieces.header.piece_starts_ns == tuple(starts)


@pytest.mark.parametrize(
    ("arrays", "says"),
    [
        ({"fs": None}, "lacks fs, holds unit, x "),
        ({"x": None, "fs": None}, "lacks x and fs, holds unit "),
        ({"unit": None}, r"lacks unit, holds fs, x \(set sources\.tape\.unit"),
        ({"x": None, "y": [1]}, "lacks x, holds fs, unit, y "),
        ({"x": [1j]}, "x is of type complex128"),
        ({"x": [True]}, "x is of type bool"),
        ({"x": ["1.0"]}, "x is of type <U3"),
        ({"x": np.zeros(3, [("a", "f8")])}, "x is of type "),
        ({"x": np.array([1], "M8[ns]")}, "x is of type datetime64"),
        ({"x": 1.0}, "x has 0 axes"),
        ({"x": np.ones((1, 2, 3, 4))}, "x has 4 axes"),
        ({"x": []}, "x holds no samples"),
        ({"x": np.ones((2, 0))}, "x holds no samples"),
        ({"x": np.ones((0, 2, 5))}, "x holds no samples"),
        (
            {"x": np.ones((1000, 2))},
            r"x, \(1000, 2\), has 1000 channels, more than 64 \(channels come first: transpose",
        ),
        ({"x": np.ones((3, 1000, 2))}, "channels come first: transpose"),
        ({"x": np.ones((65, 66))}, "has 65 channels, more than 64 .split"),
        ({"fs": np.nan}, "fs is no finite number"),
        ({"fs": np.inf}, "fs is no finite number"),
        ({"fs": "1000"}, "fs is no finite number"),
        ({"fs": 1000 + 0j}, "fs is no finite number"),
        ({"fs": [1000, 1000]}, "fs is no finite number"),
        ({"fs": 0.5}, "a rate of 0.5 Hz is outside 1 to 512000 Hz"),
        ({"fs": 512001}, "a rate of 512001 Hz is outside"),
        ({"fs": -1000.0}, "a rate of -1000 Hz is outside"),
        ({"unit": "mm/s"}, "unit is 'mm/s', none of g, m/s2, V and counts"),
        ({"unit": "G"}, "unit is 'G'"),
        ({"unit": ""}, "unit is ''"),
        ({"unit": "a\nb\x1b" * 50}, "unit is "),
        ({"unit": 1.0}, "unit is no text"),
        ({"unit": ["g", "g"]}, "unit is no text"),
        ({"start_ns": 1.7e18}, "start_ns is no integer UTC"),
        ({"start_ns": -1}, "start_ns is no integer UTC"),
        ({"start_ns": np.uint64(2**64 - 1)}, "start_ns is no integer UTC"),
        ({"start_ns": [1, 2]}, "start_ns is no single number"),
        ({"piece_start_ns": [1, 2]}, "piece_start_ns, .2,., does not fit x"),
        ({"x": np.ones((3, 1, 4)), "piece_start_ns": [1, 2]}, "piece_start_ns, .2,., does not fit x"),
        ({"x": np.ones((2, 1, 4)), "piece_start_ns": [2, 1]}, "piece_start_ns goes back in time"),
        ({"x": np.ones((2, 1, 4)), "piece_start_ns": [1.0, 2.0]}, "piece_start_ns is no integer UTC"),
    ],
)
def test_what_a_file_may_not_hold_is_said_in_one_line(tmp_path: Path, arrays: dict[str, Any], says: str) -> None:
    """Each array that does not fit is named, with what is wrong and what to do."""
    path = npz(tmp_path / "a.npz", **({"x": [1.0, 2.0]} | arrays))
    with pytest.raises(InputError, match=says) as error:
        NpzFile(path, "tape", SETTINGS)
    assert str(error.value).startswith(f"{path}: ")
    assert str(error.value).endswith(")")
    assert "\n" not in str(error.value)


@pytest.mark.parametrize(
    ("content", "says"),
    [
        (b"", "is empty"),
        (b"time;value\n0;1\n", "is no NPZ file .write it with numpy.savez"),
        (b"\x93NUMPY\x01\x00" + bytes(100), "a single array"),
        (b"RIFF\0\0\0\0WAVEfmt ", "a WAV file: name it .wav"),
        (b"PK\x03\x04" + bytes(100), "is damaged"),
        (b"PK\x05\x06" + bytes(18), "lacks x and fs and unit, holds nothing"),
    ],
)
def test_a_file_of_another_kind_is_named_as_what_it_is(tmp_path: Path, content: bytes, says: str) -> None:
    """The first bytes tell what a file is, whatever its name says."""
    path = tmp_path / "a.npz"
    path.write_bytes(content)
    with pytest.raises(InputError, match=says):
        NpzFile(path, "tape", SETTINGS)
