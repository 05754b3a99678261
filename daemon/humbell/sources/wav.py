"""WAV files: PCM of 8, 16, 24 and 32 bits, and float. The samples stay on the disk until they are played."""

import struct
import warnings
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from humbell.model import ConfigError, InputError, Samples, SampleUnit
from humbell.sources.recording import Cut, Header, as_samples, check_file, check_header, one_line
from humbell.sources.riff import FLOAT, PCM, WaveFormat, read_format
from humbell.sources.settings import ReplaySettings

_BITS = {PCM: (8, 16, 24, 32), FLOAT: (32, 64)}

_THREE_BYTES = 24  # bits: the one size that has no type of its own, so that neither numpy nor scipy can map it


class WavFile:
    """
    One WAV file.

    PCM in `counts` is handed over as the converter's integers (8 bits, stored from 0, as -128 to 127). PCM in another
    unit becomes float64: ``counts * full_scale / 2**(bits - 1)``. Float samples are in the unit as they are.

    The blocks' full scale is the converter's *positive* rail, ``(2**(bits - 1) - 1) / 2**(bits - 1) * full_scale``: the
    negative rail lies one step further out, so whatever is at or beyond that magnitude is clipped, on both sides. Where
    the file says that fewer bits than stored are valid, theirs is the rail. In counts, a smaller `full_scale` in the
    settings stands instead; for float files the settings' is the only one.

    Args:
        path: the file.

        source: id of the source, for messages.

        settings: of the source.

    Raises:
        ConfigError: the settings do not say what a WAV file leaves open.

        InputError: the file is missing, damaged, or of a kind that is not read.
    """

    def __init__(self, path: Path, source: str, settings: ReplaySettings) -> None:
        check_file(path, ".wav")
        self._format = form = read_format(path)
        _check_format(path, form)
        self.path = path
        self._scale, unit, full_scale = _scaling(path, source, settings, form)
        self.header = Header(
            path=path,
            channels=form.channels,
            rate_hz=float(form.rate_hz),
            unit=unit,
            full_scale=full_scale,
            length=form.size // form.align,
            start_ns=form.start_ns,
        )
        check_header(self.header, settings, source)
        self.load()

    def load(self) -> Cut:
        """
        Map the samples into memory; pages are read when they are asked for.

        Raises:
            InputError: the file cannot be read (any more).
        """
        three_bytes = self._format.bits == _THREE_BYTES
        try:
            stored = self._map_bytes() if three_bytes else _map(self.path)
        except (ValueError, OSError, struct.error, Warning) as error:
            raise InputError(f"{self.path}: cannot be read: {one_line(error)} (copy or record it again)") from None
        if stored.shape[:2] != (self.header.length, self.header.channels):
            raise InputError(f"{self.path}: says two things about its length (save it anew from the recorder)")

        def cut(_piece: int, first: int, last: int) -> Samples:
            part = stored[first:last]
            return self._samples(_widen(part, self._format.order) if three_bytes else part)

        return cut

    def _map_bytes(self) -> NDArray[np.uint8]:
        shape = (self.header.length, self.header.channels, 3)
        return np.asarray(np.memmap(self.path, np.uint8, "r", self._format.offset, shape))

    def _samples(self, stored: NDArray[Any]) -> Samples:
        """Return samples from stored (n, channels) values."""
        values = stored.T
        if values.dtype == np.uint8:
            values = values.astype(np.int16) - np.int16(128)
        return as_samples(values if self._scale is None else values * self._scale)


def _check_format(path: Path, form: WaveFormat) -> None:
    bits = _BITS.get(form.tag)
    if bits is None:
        raise InputError(f"{path}: is compressed, format {form.tag:#06x} (save it as PCM or float)")
    if form.bits not in bits:
        raise InputError(f"{path}: has samples of {form.bits} bits (save it with {', '.join(map(str, bits))} bits)")
    if not form.channels or form.align != form.channels * form.bits // 8 or form.size % form.align:
        raise InputError(
            f"{path}: its samples do not fit its format (copy it again, or save it anew from the recorder)"
        )


def _scaling(
    path: Path, source: str, settings: ReplaySettings, form: WaveFormat
) -> tuple[float | None, SampleUnit, float | None]:
    """Return the factor on the counts (None: leave them), the unit, and full scale in it."""
    unit, full_scale = settings.unit, settings.full_scale
    at = f"sources.{source}"
    of_full_scale = f"{at}.full_scale to the magnitude at digital full scale"
    if unit is None:
        more = f"; for g, m/s2 and V also {of_full_scale}" if form.tag == PCM and full_scale is None else ""
        raise ConfigError(f"{path}: a WAV file carries no unit (set {at}.unit to g, m/s2, V or counts{more})")
    if form.tag == FLOAT:
        return None, unit, full_scale
    steps = 1 << (form.bits - 1)
    rail = steps - (1 << (form.bits - form.valid_bits))
    if unit is SampleUnit.COUNTS:
        return None, unit, float(rail) if full_scale is None else min(float(rail), full_scale)
    if full_scale is None:
        raise ConfigError(f"{path}: PCM samples need a full scale to become {unit} (set {of_full_scale}, in {unit})")
    return full_scale / steps, unit, rail * (full_scale / steps)


def _map(path: Path) -> NDArray[Any]:
    """Return stored samples as (n, channels)."""
    from scipy.io import wavfile  # noqa: PLC0415 - half a second at every start, and few ever play a WAV file

    with warnings.catch_warnings():
        # Chunks that scipy does not know are no business of ours; a file that ends too early is.
        warnings.simplefilter("ignore", wavfile.WavFileWarning)
        warnings.filterwarnings("error", "Reached EOF prematurely", wavfile.WavFileWarning)
        _, stored = wavfile.read(path, mmap=True)
    values = np.asarray(stored)
    return values.reshape(len(values), -1)


def _widen(stored: NDArray[np.uint8], order: str) -> NDArray[np.int32]:
    """Return three-byte samples, (n, channels, 3), as counts, (n, channels)."""
    wide = np.zeros((*stored.shape[:2], 4), np.uint8)
    # In the upper three bytes first, so that the shift back keeps the sign.
    wide[..., slice(1, 4) if order == "<" else slice(0, 3)] = stored
    counts: NDArray[np.int32] = (wide.view(f"{order}i4")[..., 0] >> 8).astype(np.int32)
    return counts
