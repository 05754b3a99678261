"""Damaged and hostile files: one clear error of ours, nothing unpickled, no memory taken for what is not there."""

import io
import tracemalloc
import warnings
import zipfile
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from numpy.lib import format as npy
from scipy.io import wavfile

from humbell.model import HumbellError, InputError
from humbell.sources.npz import NpzFile
from unit.sources.recorded import SETTINGS, START_NS, npz, pcm, play


def with_objects(path: Path, name: str) -> Path:
    """Write an NPZ file in which one array holds objects, which numpy pickles."""
    arrays: dict[str, Any] = {"x": [1.0], "fs": 1.0, "unit": "g"} | {name: np.array([{"a": 1}], dtype=object)}
    np.savez(path, **arrays)
    return path


def claim(path: Path, shape: tuple[int, ...], data: bytes) -> zipfile.ZipInfo:
    """Write an NPZ file whose `x`, of float64, claims a shape that its bytes need not have."""
    header = io.BytesIO()
    npy.write_array_header_1_0(header, {"descr": "<f8", "fortran_order": False, "shape": shape})
    npz(path, None)
    with zipfile.ZipFile(path, "a", zipfile.ZIP_DEFLATED) as archive:
        archive.writestr("x.npy", header.getvalue() + data)
        return archive.getinfo("x.npy")


def test_a_file_that_was_cut_off_is_refused(tmp_path: Path) -> None:
    """The list of a zip file's members stands at its end, so a file that was cut off anywhere has lost it."""
    path = npz(tmp_path / "a.npz", np.arange(1000.0))
    whole = path.read_bytes()
    for left in range(5, len(whole), len(whole) // 20):
        path.write_bytes(whole[:left])
        with pytest.raises(InputError, match="is damaged"):
            NpzFile(path, "tape", SETTINGS)


def test_one_wrong_bit_among_the_samples_is_found_before_play(tmp_path: Path) -> None:
    """The checksum is compared when the file is opened, not when its last sample is reached."""
    path = npz(tmp_path / "a.npz", np.arange(1000.0))
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


def test_samples_that_end_before_the_archives_list_says_are_refused_before_play(tmp_path: Path) -> None:
    """The checksum fits what is there, the header what the list claims; only the number of bytes shows the loss."""
    path = tmp_path / "a.npz"
    claim(path, (11,), bytes(80))
    with zipfile.ZipFile(path, "a") as archive:
        archive.getinfo("x.npy").file_size += 8
        archive.comment = b"-"
    with pytest.raises(InputError, match="is damaged: its arrays cannot be read"):
        NpzFile(path, "tape", SETTINGS)


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
    path = npz(tmp_path / "a.npz", np.arange(10))
    file = NpzFile(path, "tape", SETTINGS)
    npz(path, np.arange(11))
    with pytest.raises(InputError, match="has changed since it was checked"):
        file.load()
    path.unlink()
    with pytest.raises(InputError, match="No such file"):
        file.load()


def damaged(whole: bytes, rng: np.random.Generator) -> bytes:
    """Return *whole* cut off, or with some bytes changed: anywhere, or among the first 200, where the headers are."""
    if rng.random() < 0.3:
        return whole[: rng.integers(len(whole))]
    content = bytearray(whole)
    reach = len(content) if rng.random() < 0.5 else 200
    for at in rng.integers(reach, size=rng.integers(1, 5)):
        content[at] = rng.integers(256)
    return bytes(content)


@pytest.mark.parametrize("kind", ["16", "24", "float32", "stored", "deflated", "pieces"])
def test_damage_of_any_kind_is_one_error_of_ours_or_none(
    tmp_path: Path, kind: str, capfd: pytest.CaptureFixture[str]
) -> None:
    """Whatever the bytes are, opening and playing raises nothing else, prints nothing and warns of nothing."""
    rng = np.random.default_rng(20260301)
    x = rng.standard_normal((2, 400))
    if kind == "float32":
        path = tmp_path / "a.wav"
        wavfile.write(path, 1000, x.T.astype(np.float32))
    elif kind in {"16", "24"}:
        path = pcm(tmp_path / "a.wav", (x * 1000).astype(np.int64), int(kind), 1000)
    elif kind == "deflated":
        path = tmp_path / "a.npz"
        np.savez_compressed(path, x=x, fs=1000.0, unit="g", start_ns=START_NS)
    else:
        path = npz(tmp_path / "a.npz", x.reshape(4, 2, 100) if kind == "pieces" else x, start_ns=START_NS)
    whole = path.read_bytes()
    assert sum(block.samples.size for block in play(path)) == 800
    refused: list[str] = []
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        for _ in range(150):
            path.write_bytes(damaged(whole, rng))
            try:
                play(path)
            except HumbellError as error:
                refused.append(str(error))
    assert len(refused) > 50
    assert all(message.startswith(f"{path}: ") and message.isprintable() for message in refused)
    assert capfd.readouterr() == ("", "")
