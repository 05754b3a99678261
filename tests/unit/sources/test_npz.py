"""NPZ files: what they may hold, and what is refused without loading or unpickling it."""

import io
import tracemalloc
import zipfile
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from numpy.lib import format as npy
from numpy.typing import ArrayLike, NDArray

from humbell.model import InputError, SampleUnit
from humbell.sources import ReplaySettings
from humbell.sources.npz import NpzFile

SETTINGS = ReplaySettings(kind="replay")
START_NS = 1_772_359_200_000_000_000  # 2026-03-01T10:00:00Z


def write(path: Path, x: ArrayLike | None, **more: ArrayLike | None) -> Path:
    """Write an NPZ file; None leaves an array out."""
    arrays: dict[str, Any] = {"x": x, "fs": 1000.0, "unit": "g"} | more
    np.savez(path, **{name: value for name, value in arrays.items() if value is not None})
    return path


def with_objects(path: Path, name: str) -> Path:
    """Write an NPZ file in which one array holds objects, which numpy pickles."""
    arrays: dict[str, Any] = {"x": [1.0], "fs": 1.0, "unit": "g"} | {name: np.array([{"a": 1}], dtype=object)}
    np.savez(path, **arrays)
    return path


def claim(path: Path, shape: tuple[int, ...], data: bytes) -> zipfile.ZipInfo:
    """Write an NPZ file whose `x`, of float64, claims a shape that its bytes need not have."""
    header = io.BytesIO()
    npy.write_array_header_1_0(header, {"descr": "<f8", "fortran_order": False, "shape": shape})
    write(path, None)
    with zipfile.ZipFile(path, "a") as archive:
        archive.writestr("x.npy", header.getvalue() + data)
        return archive.getinfo("x.npy")


def all_samples(file: NpzFile) -> NDArray[Any]:
    return file.load()(0, 0, file.header.length)


@pytest.mark.parametrize("dtype", ["float64", "float32", "int32", "int16", ">f8", ">f4", ">i4", ">i2"])
def test_common_types_of_samples_stay_what_they_are(tmp_path: Path, dtype: str) -> None:
    """float64, float32, int32 and int16 are kept, in native byte order."""
    values = np.arange(12).reshape(2, 6).astype(dtype)
    samples = all_samples(NpzFile(write(tmp_path / "a.npz", values), "tape", SETTINGS))
    assert samples.dtype == np.dtype(dtype).newbyteorder("=")
    assert samples.dtype.isnative
    np.testing.assert_array_equal(samples, values)
    assert not samples.flags.writeable


@pytest.mark.parametrize("dtype", ["int8", "uint8", "uint16", "uint32", "int64", "uint64", "float16", "longdouble"])
def test_other_real_types_become_float64(tmp_path: Path, dtype: str) -> None:
    """Rarer types are converted, so that later stages know four types only."""
    values = np.arange(12).reshape(2, 6).astype(dtype)
    samples = all_samples(NpzFile(write(tmp_path / "a.npz", values), "tape", SETTINGS))
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
        file = NpzFile(write(tmp_path / "a.npz", np.asfortranarray(values)), "tape", SETTINGS)
        header = file.header
        assert (header.pieces, header.channels, header.length) == (pieces, channels, length)
        cut = file.load()
        whole = np.array([cut(piece, 0, length) for piece in range(max(pieces, 1))])
        np.testing.assert_array_equal(whole.reshape(shape), values)


def test_values_that_are_not_finite_are_passed_on(tmp_path: Path) -> None:
    """NaN and infinite samples are for the sensor check to judge, not for the reader."""
    values = np.array([1.0, np.nan, -np.inf])
    np.testing.assert_array_equal(all_samples(NpzFile(write(tmp_path / "a.npz", values), "tape", SETTINGS))[0], values)


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
    header = NpzFile(write(tmp_path / "a.npz", [1, 2], unit=unit), "tape", settings).header
    assert header.unit == (unit if isinstance(unit, str) else unit.decode())
    assert header.full_scale == 50.0


def test_the_settings_unit_stands_in_or_must_agree(tmp_path: Path) -> None:
    """Where the file has no unit the settings' counts; where both are given they must be the same."""
    volts = ReplaySettings(kind="replay", unit=SampleUnit.VOLT)
    assert NpzFile(write(tmp_path / "a.npz", [1, 2], unit=None), "tape", volts).header.unit == "V"
    assert NpzFile(write(tmp_path / "b.npz", [1, 2], unit="V"), "tape", volts).header.unit == "V"
    with pytest.raises(InputError, match="is in g, the settings say V"):
        NpzFile(write(tmp_path / "c.npz", [1, 2], unit="g"), "tape", volts)


def test_times_in_the_file_are_utc_nanoseconds(tmp_path: Path) -> None:
    """start_ns is the first sample's time, piece_start_ns that of each piece; int64 keeps every nanosecond."""
    assert NpzFile(write(tmp_path / "a.npz", [1, 2]), "tape", SETTINGS).header.start_ns is None
    stream = NpzFile(write(tmp_path / "b.npz", [1, 2], start_ns=START_NS + 1), "tape", SETTINGS)
    assert stream.header.start_ns == START_NS + 1
    starts = [START_NS, START_NS + 600_000_000_001]
    pieces = NpzFile(write(tmp_path / "c.npz", np.ones((2, 1, 4)), piece_start_ns=starts), "tape", SETTINGS)
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
    path = write(tmp_path / "a.npz", **({"x": [1.0, 2.0]} | arrays))
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


def test_a_file_that_was_cut_off_is_refused(tmp_path: Path) -> None:
    """The list of a zip file's members stands at its end, so a file that was cut off anywhere has lost it."""
    path = write(tmp_path / "a.npz", np.arange(1000.0))
    whole = path.read_bytes()
    for left in range(5, len(whole), len(whole) // 20):
        path.write_bytes(whole[:left])
        with pytest.raises(InputError, match="is damaged"):
            NpzFile(path, "tape", SETTINGS)


def test_one_wrong_bit_among_the_samples_is_found_before_play(tmp_path: Path) -> None:
    """The checksum is compared when the file is opened, not when its last sample is reached."""
    path = write(tmp_path / "a.npz", np.arange(1000.0))
    content = bytearray(path.read_bytes())
    content[4000] ^= 1
    path.write_bytes(content)
    with pytest.raises(InputError, match="is damaged: Bad CRC"):
        NpzFile(path, "tape", SETTINGS)


@pytest.mark.parametrize("name", ["x", "fs", "unit", "start_ns"])
def test_pickled_objects_are_never_loaded(tmp_path: Path, name: str) -> None:
    """A pickle can run any program when it is loaded: arrays of objects are refused, wherever they stand."""
    with pytest.raises(InputError, match=rf"{name}\.npy holds objects"):
        NpzFile(with_objects(tmp_path / "a.npz", name), "tape", SETTINGS)


def test_arrays_that_nobody_asked_for_are_not_looked_at(tmp_path: Path) -> None:
    """A file may carry notes of its own, even ones that cannot be loaded."""
    assert NpzFile(with_objects(tmp_path / "a.npz", "notes"), "tape", SETTINGS).header.length == 1


@pytest.mark.parametrize("shape", [(11,), (1 << 40,), (1 << 62, 4)])
def test_a_header_that_claims_more_than_the_file_holds_is_refused(tmp_path: Path, shape: tuple[int, ...]) -> None:
    """What x claims must be what the file holds, else room would be made for samples that never come."""
    claim(tmp_path / "a.npz", shape, bytes(80))
    with pytest.raises(InputError, match=r"x is cut off|has \d+ channels"):
        NpzFile(tmp_path / "a.npz", "tape", SETTINGS)


def test_a_negative_shape_holds_no_samples(tmp_path: Path) -> None:
    """Two negative axes have a positive product; they are no samples all the same."""
    claim(tmp_path / "a.npz", (-1, -10), bytes(80))
    with pytest.raises(InputError, match="x holds no samples"):
        NpzFile(tmp_path / "a.npz", "tape", SETTINGS)


def test_more_than_four_gibibytes_of_samples_are_refused_by_what_the_archive_claims(tmp_path: Path) -> None:
    """The list at the archive's end claims 4 GiB and 8 bytes. There are none: nothing is read to find out."""
    path = tmp_path / "a.npz"
    count = (4 << 30) // 8 + 1
    claim(path, (count,), b"")
    with zipfile.ZipFile(path, "a") as archive:
        info = archive.getinfo("x.npy")
        info.file_size += 8 * count
        # A comment makes zipfile write the list anew, with the zip64 extension that this size needs.
        archive.comment = b"-"
    with pytest.raises(InputError, match=r"x has 4\.0 GiB, more than 4 GiB"):
        NpzFile(path, "tape", SETTINGS)


@pytest.mark.parametrize("name", ["fs", "unit", "start_ns"])
def test_a_zip_bomb_is_refused_without_being_unpacked(tmp_path: Path, name: str) -> None:
    """An array that should hold one value and unpacks to 16 MiB, from 16 KiB, takes no memory."""
    arrays: dict[str, Any] = {"x": [1.0], "fs": 1.0, "unit": "g"} | {name: np.zeros(1 << 21)}
    np.savez_compressed(tmp_path / "a.npz", **arrays)
    tracemalloc.start()
    try:
        with pytest.raises(InputError, match="has 16777344 bytes"):
            NpzFile(tmp_path / "a.npz", "tape", SETTINGS)
        peak_bytes = tracemalloc.get_traced_memory()[1]
    finally:
        tracemalloc.stop()
    assert peak_bytes < 1 << 20


def test_samples_are_checked_a_little_at_a_time(tmp_path: Path) -> None:
    """The check of a file before play holds 1 MiB of it or so at once, not all of it."""
    np.savez_compressed(tmp_path / "a.npz", x=np.zeros(1 << 21), fs=1.0, unit="g")
    tracemalloc.start()
    NpzFile(tmp_path / "a.npz", "tape", SETTINGS)
    peak_bytes = tracemalloc.get_traced_memory()[1]
    tracemalloc.stop()
    assert peak_bytes < 6 << 20


def test_a_file_that_changed_after_the_check_is_refused_when_it_is_played(tmp_path: Path) -> None:
    """Between the check and the play a file may change; it is still one clear line."""
    path = write(tmp_path / "a.npz", np.arange(10))
    file = NpzFile(path, "tape", SETTINGS)
    write(path, np.arange(11))
    with pytest.raises(InputError, match="has changed since it was checked"):
        file.load()
    path.unlink()
    with pytest.raises(InputError, match="No such file"):
        file.load()
