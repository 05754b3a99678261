"""The frame of a WAV file: its chunks, its format and its time, read in bounded steps. Reads no samples."""

import re
import struct
from dataclasses import dataclass
from datetime import UTC, datetime
from pathlib import Path
from typing import BinaryIO

from humbell.model import InputError

PCM = 1
FLOAT = 3
_EXTENSIBLE = 0xFFFE

# Byte order by signature. RF64 is RIFF with 64-bit sizes (EBU Tech 3306), RIFX is RIFF in big-endian order.
_ORDERS = {b"RIFF": "<", b"RF64": "<", b"RIFX": ">"}

# A format in the "extensible" form is a GUID: the plain tag, followed by this tail (RFC 2361, from memory).
_GUID_TAILS = {
    "<": b"\x00\x00\x10\x00\x80\x00\x00\xaa\x00\x38\x9b\x71",
    ">": b"\x00\x00\x00\x10\x80\x00\x00\xaa\x00\x38\x9b\x71",
}

# Recorders write about ten; a file of nothing but empty chunks must not keep us busy.
_MAX_CHUNKS = 1024

# Broadcast wave (EBU Tech 3285, from memory): behind 256 + 32 + 32 bytes of text, date (10) and time (8).
_BEXT_TIME = slice(320, 338)
_BEXT_FORM = re.compile(rb"(\d{4})[-_:. ](\d\d)[-_:. ](\d\d)(\d\d)[-_:. ](\d\d)[-_:. ](\d\d)")


@dataclass(frozen=True, slots=True)
class WaveFormat:
    """
    How the samples of one WAV file are stored.

    Args:
        order: ``<`` or ``>``, the byte order.

        tag: `PCM` or `FLOAT`; others are refused by the reader of the samples.

        channels: number of channels.

        rate_hz: samples a second and channel.

        bits: size of one sample.

        valid_bits: those of them that the converter fills, from the left.

        align: bytes of one sample of all channels.

        offset: bytes before the first sample.

        size: bytes of all samples.

        start_ns: date and time in the ``bext`` chunk, ns since 1970; None where there is none. The format knows no time
            zone: it is taken as UTC. Whole seconds; the chunk's TimeReference (samples since midnight) is not used.
    """

    order: str
    tag: int
    channels: int
    rate_hz: int
    bits: int
    valid_bits: int
    align: int
    offset: int
    size: int
    start_ns: int | None


def read_format(path: Path) -> WaveFormat:
    """
    Read everything but the samples.

    Raises:
        InputError: the file is damaged or cut off.
    """
    try:
        with path.open("rb") as file:
            return _read(file, path)
    except (OSError, struct.error):
        raise InputError(f"{path}: its header cannot be read (copy or record it again)") from None


def _read(file: BinaryIO, path: Path) -> WaveFormat:
    length = file.seek(0, 2)
    file.seek(0)
    signature, said, form = struct.unpack("4s4s4s", file.read(12))
    if signature not in _ORDERS or form != b"WAVE":
        raise InputError(f"{path}: is no WAV file (give a WAV file, PCM or float)")
    order = _ORDERS[signature]
    chunks, wide = _chunks(file, path, length, order, rf64=signature == b"RF64")
    offset, size = chunks.get(b"data", (0, 0))
    total = 8 + (wide or struct.unpack(f"{order}I", said)[0])
    # Some writers count the padding byte of an odd chunk and leave it out.
    short = max(offset + size, total - 1) - length
    if short > 0:
        raise InputError(
            f"{path}: is cut off, {short} bytes are missing (copy it again, or save it anew from the recorder)"
        )
    if b"fmt " not in chunks or b"data" not in chunks:
        raise InputError(f"{path}: holds no samples, or no format for them (copy or record it again)")
    if total < offset + size:
        raise InputError(f"{path}: says it is shorter than its samples (save it anew from the recorder)")
    tag, channels, rate_hz, align, bits, valid = _format(file, *chunks[b"fmt "], order)
    start_ns = _bext_time(file, *chunks[b"bext"]) if b"bext" in chunks else None
    return WaveFormat(order, tag, channels, rate_hz, bits, valid, align, offset, size, start_ns)


def _chunks(
    file: BinaryIO, path: Path, length: int, order: str, *, rf64: bool
) -> tuple[dict[bytes, tuple[int, int]], int]:
    """Return where each chunk's content begins and how long it is, and the file's own 64-bit size (0: none)."""
    found: dict[bytes, tuple[int, int]] = {}
    wide = wide_data = 0
    at = 12
    for _ in range(_MAX_CHUNKS):
        if at + 8 > length:
            return found, wide
        file.seek(at)
        name, size = struct.unpack(f"{order}4sI", file.read(8))
        if name == b"ds64" and rf64:
            wide, wide_data = struct.unpack("<QQ", file.read(16))
        if name == b"data" and rf64:
            size = wide_data
        if name in found and name in (b"fmt ", b"data"):
            raise InputError(f"{path}: has two {name.decode().strip()} chunks (save it anew from the recorder)")
        found.setdefault(name, (at + 8, size))
        at += 8 + size + size % 2
    raise InputError(f"{path}: has more than {_MAX_CHUNKS} chunks (save it anew from the recorder)")


def _format(file: BinaryIO, at: int, size: int, order: str) -> tuple[int, int, int, int, int, int]:
    """Return tag, channels, rate, bytes a sample of all channels, bits and valid bits."""
    file.seek(at)
    content = file.read(min(size, 40))
    tag, channels, rate_hz, _, align, bits = struct.unpack_from(f"{order}HHIIHH", content)
    valid = bits
    if tag == _EXTENSIBLE:
        valid, _, guid = struct.unpack_from(f"{order}HI16s", content, 18)
        if guid.endswith(_GUID_TAILS[order]):
            (tag,) = struct.unpack_from(f"{order}I", guid)
    return tag, channels, rate_hz, align, bits, valid if 0 < valid <= bits else bits


def _bext_time(file: BinaryIO, at: int, size: int) -> int | None:
    """Return the time of the first sample, None where the chunk gives no valid one after 1970."""
    file.seek(at)
    match = _BEXT_FORM.fullmatch(file.read(min(size, _BEXT_TIME.stop))[_BEXT_TIME])
    if match is None:
        return None
    year, month, day, hour, minute, second = (int(part) for part in match.groups())
    try:
        seconds = int(datetime(year, month, day, hour, minute, second, tzinfo=UTC).timestamp())
    except ValueError:
        return None
    # Recorders without a clock write zeros or their first day.
    return seconds * 1_000_000_000 if seconds > 0 else None
