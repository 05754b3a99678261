"""Recorded files as the tests make them, and the play of them."""

import struct
import wave
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from humbell.model import Block, SampleUnit
from humbell.sources import EndOfSource, ReplaySettings, ReplaySource

START_NS = 1_772_359_200_000_000_000  # date -u -d '2026-03-01 10:00:00' +%s
SETTINGS = ReplaySettings(kind="replay", unit=SampleUnit.G, full_scale=50.0)


def npz(path: Path, x: ArrayLike | None, **more: ArrayLike | None) -> Path:
    """Write an NPZ file, in g at 1 kHz where nothing else is said; None leaves an array out."""
    arrays: dict[str, Any] = {"x": x, "fs": 1000.0, "unit": "g"} | more
    np.savez(path, **{name: value for name, value in arrays.items() if value is not None})
    return path


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
    """Return a chunk, padded to an even length."""
    return name + struct.pack("<I", len(content)) + content + b"\0" * (len(content) % 2)


def bext(date: bytes, time: bytes) -> bytes:
    """Return a chunk by EBU Tech 3285: three texts of 256, 32 and 32 bytes, date, time, TimeReference, version."""
    return chunk(b"bext", b"recorder".ljust(320, b"\0") + date + time + struct.pack("<QH", 12345, 1) + bytes(254))


def riff(*chunks: bytes, tail: bytes = b"") -> bytes:
    """Return a file of *chunks*; the tail lies beyond what it says is its length."""
    content = b"WAVE" + b"".join(chunks)
    return b"RIFF" + struct.pack("<I", len(content)) + content + tail


def fmt(tag: int = 1, channels: int = 1, rate_hz: int = 8000, bits: int = 16) -> bytes:
    """Return a format chunk."""
    align = channels * bits // 8
    return chunk(b"fmt ", struct.pack("<HHIIHH", tag, channels, rate_hz, rate_hz * align, align, bits))


def play(
    *files: Path, start_ns: int | None = None, block_s: float = 0.25, piece_every_s: float | None = None
) -> list[Block]:
    """Return all blocks."""
    source = ReplaySource("tape", SETTINGS, files, start_ns, block_s, piece_every_s=piece_every_s)
    source.open()
    return list(blocks_of(source))


def blocks_of(source: ReplaySource) -> Iterator[Block]:
    """Yield the blocks of an open source to its end."""
    while True:
        try:
            block = source.read(0.0)
        except EndOfSource:
            return
        assert block is not None
        yield block
