"""What one recorded file says of itself, and the checks that hold for every type of file. Reads no samples."""

import math
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Protocol

import numpy as np
from numpy.typing import NDArray

from humbell.model import InputError, Samples, SampleUnit
from humbell.sources.settings import MAX_CHANNELS, MAX_RATE_HZ, MIN_RATE_HZ, ReplaySettings

# A rate that went through float32 on its way is off by up to 6e-8 of it; crystals are off by more than 1 ppm.
_SAME_RATE = 1e-6

_KEPT = frozenset(np.dtype(kind) for kind in (np.float64, np.float32, np.int32, np.int16))

_RIFF = (b"RIFF", b"RIFX", b"RF64")
_ZIP = (b"PK\x03\x04", b"PK\x05\x06")
_NPY = b"\x93NUMPY"

# Samples [first, last) of one piece (0 for a stream): (channels, last - first), read-only.
Cut = Callable[[int, int, int], Samples]


@dataclass(frozen=True, slots=True)
class Header:
    """
    What one file says of itself, completed from the settings.

    Args:
        path: the file.

        channels: number of channels.

        rate_hz: samples a second and channel.

        unit: unit of the samples as they are handed over.

        full_scale: the largest magnitude that the converter gives, in *unit*; None where unknown.

        length: samples in each channel, of pieces: in each channel of one piece.

        pieces: number of pieces; 0 for a stream.

        start_ns: the file's own start, UTC, ns since 1970; None where it has none.

        piece_starts_ns: the file's own start of each piece; empty where it has none.
    """

    path: Path
    channels: int
    rate_hz: float
    unit: SampleUnit
    full_scale: float | None
    length: int
    pieces: int = 0
    start_ns: int | None = None
    piece_starts_ns: tuple[int, ...] = ()


class RecordedFile(Protocol):
    """A file that has been checked and can be played."""

    @property
    def header(self) -> Header:
        """What the file says of itself."""
        ...

    def load(self) -> Cut:
        """
        Make the samples readable.

        Raises:
            InputError: the file cannot be read any more.
        """
        ...


def check_file(path: Path, suffix: str) -> None:
    """
    Check that there is a file whose first bytes are those of its type.

    Args:
        path: the file.

        suffix: its type, ``.wav`` or ``.npz``.

    Raises:
        InputError: there is no such file, or it is something else.
    """
    try:
        if path.exists() and not path.is_file():
            raise InputError(f"{path}: is a folder or a device (give a file)")
        with path.open("rb") as file:
            head = file.read(8)
    except FileNotFoundError:
        raise InputError(f"{path}: no such file (check the path)") from None
    except (OSError, ValueError) as error:
        raise InputError(f"{path}: cannot be opened: {one_line(error)} (check the path and its rights)") from None
    if not head:
        raise InputError(f"{path}: is empty (record or copy it again)")
    if suffix == ".wav" and not head.startswith(_RIFF):
        other = "an NPZ file: name it .npz" if head.startswith(_ZIP) else "give a WAV file, PCM or float"
        raise InputError(f"{path}: is no WAV file ({other})")
    if suffix == ".npz" and not head.startswith(_ZIP):
        other = "write it with numpy.savez, with the arrays x, fs and unit"
        if head.startswith(_RIFF):
            other = "a WAV file: name it .wav"
        elif head.startswith(_NPY):
            other = f"a single array: {other}"
        raise InputError(f"{path}: is no NPZ file ({other})")


def check_header(header: Header, settings: ReplaySettings, source: str) -> None:
    """
    Check what must hold for a file of any type.

    Raises:
        InputError: a number is outside its limits, or the rate is not the expected one.
    """
    path, rate_hz = header.path, header.rate_hz
    if not MIN_RATE_HZ <= rate_hz <= MAX_RATE_HZ:
        raise InputError(
            f"{path}: a rate of {rate_hz:g} Hz is outside {MIN_RATE_HZ:g} to {MAX_RATE_HZ:.0f} Hz "
            "(give samples a second and channel)"
        )
    if header.channels < 1 or header.length < 1:
        raise InputError(f"{path}: holds no samples (record it again; a recorder that lost power leaves such a file)")
    if header.channels > MAX_CHANNELS:
        raise InputError(f"{path}: has {header.channels} channels, more than {MAX_CHANNELS} (split it)")
    expected = settings.rate_hz
    if expected is not None and not math.isclose(rate_hz, expected, rel_tol=_SAME_RATE):
        raise InputError(
            f"{path}: has a rate of {rate_hz:.10g} Hz, not {expected:.10g} Hz "
            f"(give another file, or set sources.{source}.rate_hz)"
        )


def as_samples(values: NDArray[Any]) -> Samples:
    """
    Return real or integer *values* as samples: read-only, in native byte order.

    float64, float32, int32 and int16 stay what they are, all else becomes float64. A copy is made only where the type
    changes; *values* itself is not changed.
    """
    kind = values.dtype.newbyteorder("=")
    samples = np.asarray(values, dtype=kind if kind in _KEPT else np.float64).view()
    samples.flags.writeable = False
    return samples


def one_line(error: Exception) -> str:
    """Return what *error* says, without the line breaks of the library that raised it."""
    if isinstance(error, OSError) and error.strerror:
        return error.strerror
    text = " ".join(str(error).split())
    # 120 letters: the rest of a message this long is a dump of the damaged bytes.
    return text[:120] if text.isprintable() and text else type(error).__name__
