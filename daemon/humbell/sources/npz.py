"""NPZ files: arrays `x`, `fs` and `unit`, and times where there are any. Never unpickles; looks before it loads."""

import math
import warnings
import zipfile
from collections.abc import Iterator
from contextlib import contextmanager
from itertools import pairwise
from pathlib import Path
from typing import Any

import numpy as np
from numpy.lib import format as npy
from numpy.typing import NDArray

from humbell.model import HumbellError, InputError, Samples, SampleUnit
from humbell.sources.recording import Cut, Header, as_samples, check_file, check_header, one_line
from humbell.sources.settings import MAX_CHANNELS, ReplaySettings

# Bytes of samples: as much as a computer with 8 GiB can hold beside everything else.
MAX_BYTES = 4 << 30

# Bytes of an array that holds one value or name, header included.
_MAX_SMALL = 1 << 16

# Ends in the year 2200: what lies beyond is no clock's time, and int64 still holds every sum with it.
_LATEST_NS = 7_258_118_400_000_000_000

_NEEDED = ("x", "fs", "unit")

# What they say is worth reading: a wrong checksum, a missing file, an encrypted or strangely packed one.
_TELLING = (zipfile.BadZipFile, OSError, RuntimeError)

_Shape = tuple[int, ...]


class NpzFile:
    """
    One NPZ file.

    `x` is (n,), (channels, n) or (pieces, channels, n), real or integer; `fs` the rate in Hz; `unit` one of g, m/s2, V
    and counts. Optional: `start_ns`, UTC of the first sample, and `piece_start_ns`, (pieces,), UTC of each piece's
    first sample, both integer ns since 1970. Other arrays are not looked at.

    Args:
        path: the file.

        source: id of the source, for messages.

        settings: of the source.

    Raises:
        InputError: the file is missing, damaged, or does not hold what it should.
    """

    def __init__(self, path: Path, source: str, settings: ReplaySettings) -> None:
        check_file(path, ".npz")
        self.path = path
        with _opened(path) as archive:
            names = {info.filename.removesuffix(".npy"): info for info in archive.infolist()}
            self._check_names(names, source, settings.unit)
            self._samples_name = names["x"].filename
            pieces, channels, length = self._check_x(archive, names["x"])
            starts = self._piece_starts(archive, names, pieces)
            self.header = Header(
                path=path,
                channels=channels,
                rate_hz=self._rate(archive, names["fs"]),
                unit=self._unit(archive, names.get("unit"), settings.unit),
                full_scale=settings.full_scale,
                length=length,
                pieces=pieces,
                start_ns=starts[0] if starts else self._start(archive, names.get("start_ns")),
                piece_starts_ns=starts,
            )
            check_header(self.header, settings, source)
            _check_content(archive, names["x"])

    def load(self) -> Cut:
        """
        Read the samples into memory.

        Raises:
            InputError: the file cannot be read any more, or is too big for this computer.
        """
        with _opened(self.path) as archive:
            stored = _read(archive, self._samples_name)
        header = self.header
        if stored.size != max(header.pieces, 1) * header.channels * header.length:
            raise InputError(f"{self.path}: has changed since it was checked (start again)")
        pieces = stored.reshape(-1, header.channels, header.length)

        def cut(piece: int, first: int, last: int) -> Samples:
            return as_samples(pieces[piece, :, first:last])

        return cut

    def _check_names(self, names: dict[str, zipfile.ZipInfo], source: str, unit: SampleUnit | None) -> None:
        missing = [name for name in _NEEDED if name not in names and not (name == "unit" and unit)]
        if not missing:
            return
        # Ten names are enough to recognise a file by.
        found = ", ".join(sorted(name if name.isprintable() else ascii(name) for name in names)[:10]) or "nothing"
        hint = "write it with numpy.savez, with the arrays x, fs and unit"
        if missing == ["unit"]:
            hint = f"set sources.{source}.unit to g, m/s2, V or counts"
        raise InputError(f"{self.path}: lacks {' and '.join(missing)}, holds {found} ({hint})")

    def _check_x(self, archive: zipfile.ZipFile, info: zipfile.ZipInfo) -> tuple[int, int, int]:
        """Return pieces (0: a stream), channels and length."""
        shape, dtype, size = _array_header(archive, info)
        if dtype.kind not in "iuf":
            raise InputError(f"{self.path}: x is of type {str(dtype)[:40]}, neither real nor integer (convert it)")
        if len(shape) not in (1, 2, 3):
            raise InputError(
                f"{self.path}: x has {len(shape)} axes (give (n,), (channels, n) or (pieces, channels, n))"
            )
        if min(shape) < 1:
            raise InputError(f"{self.path}: x holds no samples, its shape is {shape} (record it again)")
        if size > MAX_BYTES:
            raise InputError(f"{self.path}: x has {size / 2**30:.1f} GiB, more than {MAX_BYTES >> 30} GiB (split it)")
        if math.prod(shape) * dtype.itemsize != size:
            raise InputError(f"{self.path}: x is cut off (copy it again)")
        length = shape[-1]
        channels = shape[-2] if len(shape) > 1 else 1
        if channels > MAX_CHANNELS:
            hint = "channels come first: transpose it" if length <= MAX_CHANNELS else "split it"
            raise InputError(f"{self.path}: x, {shape}, has {channels} channels, more than {MAX_CHANNELS} ({hint})")
        return shape[0] if len(shape) == 3 else 0, channels, length  # noqa: PLR2004 - (pieces, channels, n)

    def _rate(self, archive: zipfile.ZipFile, info: zipfile.ZipInfo) -> float:
        values = _small(archive, info)
        if values.dtype.kind not in "iuf" or values.size != 1 or not math.isfinite(values.item()):
            raise InputError(f"{self.path}: fs is no finite number (give samples a second and channel, in Hz)")
        return float(values.item())

    def _unit(self, archive: zipfile.ZipFile, info: zipfile.ZipInfo | None, expected: SampleUnit | None) -> SampleUnit:
        if info is None and expected is not None:
            return expected
        values = _small(archive, info) if info is not None else np.array("")
        text = values.item() if values.dtype.kind in "US" and values.size == 1 else None
        text = text.decode("ascii", "replace") if isinstance(text, bytes) else text
        if text not in set(SampleUnit):
            given = ascii(text)[:24] if isinstance(text, str) else "no text"
            raise InputError(f"{self.path}: unit is {given}, none of g, m/s2, V and counts (write it anew)")
        unit = SampleUnit(text)
        if expected not in (None, unit):
            raise InputError(f"{self.path}: is in {unit}, the settings say {expected} (correct one of them)")
        return unit

    def _start(self, archive: zipfile.ZipFile, info: zipfile.ZipInfo | None) -> int | None:
        if info is None:
            return None
        values = _small(archive, info)
        if values.size != 1:
            raise InputError(f"{self.path}: start_ns is no single number (give UTC in ns since 1970)")
        return self._times("start_ns", values)[0]

    def _piece_starts(self, archive: zipfile.ZipFile, names: dict[str, zipfile.ZipInfo], pieces: int) -> _Shape:
        info = names.get("piece_start_ns")
        if info is None:
            return ()
        shape, _, _ = _array_header(archive, info)
        if not pieces or shape != (pieces,):
            raise InputError(f"{self.path}: piece_start_ns, {shape}, does not fit x (give one time for each piece)")
        starts = self._times("piece_start_ns", _small(archive, info, 8 * pieces))
        if any(later < earlier for earlier, later in pairwise(starts)):
            raise InputError(f"{self.path}: piece_start_ns goes back in time (sort the pieces)")
        return starts

    def _times(self, name: str, values: NDArray[Any]) -> tuple[int, ...]:
        times = tuple(values.ravel().tolist()) if values.dtype.kind in "iu" else ()
        if not times or min(times) < 0 or max(times) > _LATEST_NS:
            raise InputError(f"{self.path}: {name} is no integer UTC in ns since 1970 (write it as int64)")
        return times


@contextmanager
def _opened(path: Path) -> Iterator[zipfile.ZipFile]:
    """Open the archive; turn all that damaged bytes can cause into one error."""
    try:
        with warnings.catch_warnings():
            # numpy's header reader evaluates a literal, and damaged ones can make the compiler warn.
            warnings.simplefilter("ignore")
            with zipfile.ZipFile(path) as archive:
                yield archive
    except MemoryError:
        raise InputError(f"{path}: does not fit into memory (split it)") from None
    except HumbellError:
        raise
    # zipfile, its decompressors, numpy, ast and tokenize raise more kinds of errors than a list could keep up with.
    except Exception as error:  # noqa: BLE001
        what = one_line(error) if isinstance(error, _TELLING) else "its arrays cannot be read"
        raise InputError(f"{path}: is damaged: {what} (copy it again)") from None


def _array_header(archive: zipfile.ZipFile, info: zipfile.ZipInfo) -> tuple[_Shape, np.dtype[Any], int]:
    """Return shape, type, and the bytes that follow the header."""
    with archive.open(info) as file:
        # Version 3.0 is for records with names beyond latin-1: nothing that is read here.
        read = npy.read_array_header_2_0 if npy.read_magic(file) == (2, 0) else npy.read_array_header_1_0
        shape, _, dtype = read(file)
        size = info.file_size - file.tell()
    if dtype.hasobject:
        raise InputError(
            f"{archive.filename}: {info.filename} holds objects, which are never loaded (write plain numbers)"
        )
    return shape, dtype, size


def _small(archive: zipfile.ZipFile, info: zipfile.ZipInfo, more: int = 0) -> NDArray[Any]:
    shape, dtype, size = _array_header(archive, info)
    if info.file_size > _MAX_SMALL + more:
        raise InputError(f"{archive.filename}: {info.filename} has {info.file_size} bytes (write one value)")
    if math.prod(shape) * dtype.itemsize != size:
        raise InputError(f"{archive.filename}: {info.filename} is cut off (copy it again)")
    return _read(archive, info)


def _read(archive: zipfile.ZipFile, member: zipfile.ZipInfo | str) -> NDArray[Any]:
    with archive.open(member) as file:
        values: NDArray[Any] = npy.read_array(file, allow_pickle=False)
    return values


def _check_content(archive: zipfile.ZipFile, info: zipfile.ZipInfo) -> None:
    """Read *info* once, a little at a time: zipfile compares its checksum at the end."""
    left = info.file_size
    with archive.open(info) as file:
        while part := file.read(1 << 20):
            left -= len(part)
    if left:
        raise EOFError(f"{info.filename} ends too early")
