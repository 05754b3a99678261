"""Recorded files as a source: as fast as they are read, one after the other."""

import math
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass
from itertools import count
from pathlib import Path

from humbell.model import Block, ConfigError, InputError, SampleUnit
from humbell.sources.base import EndOfSource
from humbell.sources.npz import NpzFile
from humbell.sources.recording import Cut, RecordedFile
from humbell.sources.settings import ReplaySettings
from humbell.sources.timeline import Placed, place
from humbell.sources.wav import WavFile

_TYPES: dict[str, Callable[[Path, str, ReplaySettings], RecordedFile]] = {".wav": WavFile, ".npz": NpzFile}


@dataclass(frozen=True, slots=True)
class Recording:
    """
    What one file of a replay holds.

    Args:
        path: the file.

        channels: number of channels.

        rate_hz: samples a second and channel.

        unit: unit of the samples as they are handed over.

        pieces: number of pieces; 0 for a stream.

        length: samples in each channel, of pieces: in each channel of one piece.

        start_ns: UTC of the first sample as it is played, ns since 1970.
    """

    path: Path
    channels: int
    rate_hz: float
    unit: SampleUnit
    pieces: int
    length: int
    start_ns: int

    @property
    def seconds(self) -> float:
        """Seconds of signal in each channel; the time between pieces does not count."""
        return max(self.pieces, 1) * self.length / self.rate_hz


class ReplaySource:
    """
    Plays recorded files, ``.wav`` and ``.npz``, in the order given, as one source.

    Sequence numbers run on from file to file. Files that do not join up without a break have boot ids of their own
    (`place` has the rules for times and boots). A start time is computed from the sample's number in its file, so it
    does not depend on how blocks are cut. NaN and infinite samples are passed on.

    Args:
        name: the source's id.

        settings: how the files are to be understood.

        files: what to play.

        start_ns: UTC of the first sample, ns since 1970; None to use the files' own times.

        block_s: seconds of signal in a block, rounded to samples; a file's last block is shorter, a piece is one block.

        piece_every_s: seconds from the start of one piece to the start of the next; None to use the files' own times.
    """

    def __init__(
        self,
        name: str,
        settings: ReplaySettings,
        files: Sequence[Path],
        start_ns: int | None = None,
        block_s: float = 0.25,
        *,
        piece_every_s: float | None = None,
    ) -> None:
        self._name = name
        self._settings = settings
        self._files = tuple(files)
        self._start_ns = start_ns
        self._block_s = block_s
        self._piece_every_s = piece_every_s
        self._recordings: tuple[Recording, ...] = ()
        self._blocks: Iterator[Block] | None = None

    @property
    def name(self) -> str:
        """The source's id."""
        return self._name

    @property
    def recordings(self) -> tuple[Recording, ...]:
        """What the files hold, in the order of play; empty before the source is opened."""
        return self._recordings

    @property
    def seconds(self) -> float:
        """Seconds of signal in all files."""
        return sum(recording.seconds for recording in self._recordings)

    def open(self) -> None:
        """
        Check all files, and go to the beginning of the first.

        Raises:
            ConfigError: the settings or the arguments do not fit the files.

            InputError: a file is missing, damaged, or not what it says it is.
        """
        self._check_arguments()
        files = [self._check(path) for path in self._files]
        placed = place([file.header for file in files], self._start_ns, self._piece_every_s)
        self._recordings = tuple(_recording(one) for one in placed)
        self._blocks = self._play(files, placed)

    def read(self, timeout_s: float) -> Block | None:  # noqa: ARG002 - files never keep us waiting
        """
        Return the next block, without waiting.

        Raises:
            EndOfSource: all files have been played.

            InputError: a file has changed since it was checked.

            RuntimeError: the source is not open.
        """
        if self._blocks is None:
            raise RuntimeError(f"source {self._name} is not open")
        try:
            return next(self._blocks)
        except StopIteration:
            raise EndOfSource from None

    def close(self) -> None:
        """Let go of the files. What has been read stays valid."""
        self._blocks = None

    def _check_arguments(self) -> None:
        at = f"sources.{self._name}"
        if not self._files:
            raise ConfigError(f"{at}: nothing to play (give at least one file)")
        if not (math.isfinite(self._block_s) and self._block_s > 0):
            raise ConfigError(f"{at}: blocks of {self._block_s} s cannot be (give a length above 0)")
        if self._piece_every_s is not None and not (math.isfinite(self._piece_every_s) and self._piece_every_s > 0):
            raise ConfigError(f"{at}: pieces cannot start every {self._piece_every_s} s (give a time above 0)")
        if self._start_ns is not None and self._start_ns < 0:
            raise ConfigError(f"{at}: the start lies before 1970 (give a later one)")

    def _check(self, path: Path) -> RecordedFile:
        reader = _TYPES.get(path.suffix.lower())
        if reader is None:
            raise InputError(f"{path}: is neither .wav nor .npz (save it as one of them)")
        return reader(path, self._name, self._settings)

    def _play(self, files: Sequence[RecordedFile], placed: Sequence[Placed]) -> Iterator[Block]:
        numbers = count()
        for file, place_ in zip(files, placed, strict=True):
            # One file at a time in memory; the one before has been let go of.
            yield from self._play_one(file.load(), place_, numbers)

    def _play_one(self, cut: Cut, placed: Placed, numbers: Iterator[int]) -> Iterator[Block]:
        header = placed.header
        step = header.length if header.pieces else max(1, round(self._block_s * header.rate_hz))
        for piece, start_ns in enumerate(placed.piece_starts_ns or (placed.start_ns,)):
            for first in range(0, header.length, step):
                yield Block(
                    source=self._name,
                    boot=placed.boot,
                    seq=next(numbers),
                    start_ns=start_ns + round(first * 1e9 / header.rate_hz),
                    rate_hz=header.rate_hz,
                    unit=header.unit,
                    samples=cut(piece, first, min(first + step, header.length)),
                    piece=header.pieces > 0,
                    full_scale=header.full_scale,
                )


def _recording(placed: Placed) -> Recording:
    header = placed.header
    return Recording(
        path=header.path,
        channels=header.channels,
        rate_hz=header.rate_hz,
        unit=header.unit,
        pieces=header.pieces,
        length=header.length,
        start_ns=placed.start_ns,
    )
