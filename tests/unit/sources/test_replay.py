"""Replay: blocks, times and runs of files that are played as one source."""

import math
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from pydantic import ValidationError
from scipy.io import wavfile

from humbell.model import ConfigError, InputError, SampleUnit
from humbell.sources import ReplaySettings, ReplaySource
from unit.sources.recorded import SETTINGS, START_NS, blocks_of, npz, play

SECOND_NS = 1_000_000_000


def test_blocks_have_the_length_asked_for_and_the_last_holds_the_rest(tmp_path: Path) -> None:
    """block_s is rounded to samples, and is one sample at least."""
    path = npz(tmp_path / "a.npz", np.arange(1100))
    assert [block.length for block in play(path)] == [250, 250, 250, 250, 100]
    assert [block.length for block in play(path, block_s=0.4996)] == [500, 500, 100]
    assert {block.length for block in play(path, block_s=1e-9)} == {1}
    assert [block.length for block in play(path, block_s=1e9)] == [1100]


@pytest.mark.parametrize("rate_hz", [1000.0, 48828.0, 99.3, 44100.0 / 7])
def test_a_samples_time_does_not_depend_on_the_cut(tmp_path: Path, rate_hz: float) -> None:
    """A block starts at start + round(i * 1e9 / fs), i being its first sample's number in the file: nothing adds up."""
    path = npz(tmp_path / "a.npz", np.arange(5000), fs=rate_hz, start_ns=START_NS)
    for block_s in (0.001, 0.01, 0.25):
        for block in play(path, block_s=block_s):
            number = int(block.samples[0, 0])
            assert block.start_ns == START_NS + round(number * 1e9 / rate_hz)


def test_a_piece_is_one_block_and_marked_as_one(tmp_path: Path) -> None:
    """A piece is never cut, whatever block_s is."""
    blocks = play(npz(tmp_path / "a.npz", np.ones((3, 2, 1000))), block_s=0.01)
    assert [(block.piece, block.length, block.channels) for block in blocks] == [(True, 1000, 2)] * 3


def test_what_the_files_hold_is_known_once_the_source_is_open(tmp_path: Path) -> None:
    """Progress and checks need rates, lengths and the seconds of signal, the time between pieces not among them."""
    files = [
        npz(tmp_path / "a.npz", np.ones((2, 500)), start_ns=START_NS),
        npz(tmp_path / "b.npz", np.ones((3, 1, 4000)), fs=2000.0),
    ]
    source = ReplaySource("tape", SETTINGS, files, piece_every_s=60.0)
    assert source.seconds == 0
    source.open()
    assert len(source.recordings) == 2
    first, second = source.recordings
    assert (first.path, first.channels, first.rate_hz, first.unit) == (files[0], 2, 1000.0, SampleUnit.G)
    assert (first.pieces, first.length, first.start_ns, first.seconds) == (0, 500, START_NS, 0.5)
    assert (second.pieces, second.length, second.start_ns) == (3, 4000, START_NS + SECOND_NS // 2)
    assert source.seconds == 6.5


def test_full_scale_travels_with_the_blocks(tmp_path: Path) -> None:
    """The sensor check sees clipping only where the block says where it is."""
    wavfile.write(tmp_path / "a.wav", 1000, np.array([0, 32767, -32768], np.int16))
    (wav,), (plain,) = play(tmp_path / "a.wav"), play(npz(tmp_path / "a.npz", [1.0]))
    assert wav.full_scale is not None
    assert (np.abs(wav.samples) >= wav.full_scale).tolist() == [[False, True, True]]
    assert plain.full_scale == 50.0


@pytest.mark.parametrize("name", ["a.csv", "a", "a.npy", "a.npz.gz", ".npz"])
def test_other_names_are_refused(tmp_path: Path, name: str) -> None:
    """The ending of its name says what a file is."""
    (tmp_path / name).write_bytes(b"anything")
    with pytest.raises(InputError, match=r"is neither \.wav nor \.npz"):
        play(tmp_path / name)


def test_endings_may_be_in_capitals(tmp_path: Path) -> None:
    """Recorders with old file systems write .WAV."""
    wavfile.write(tmp_path / "A.WAV", 1000, np.ones(5, np.int16))
    assert len(play(tmp_path / "A.WAV")) == 1


def test_folders_and_missing_files_are_named(tmp_path: Path) -> None:
    """One clear line each."""
    (tmp_path / "a.npz").mkdir()
    with pytest.raises(InputError, match="is a folder or a device"):
        play(tmp_path / "a.npz")
    for path in (tmp_path / "b.wav", tmp_path / "a.npz" / "c" / "d.npz"):
        with pytest.raises(InputError, match="no such file"):
            play(path)
    with pytest.raises(InputError, match="cannot be opened"):
        play(tmp_path / "a\0b.wav")


def test_all_files_are_checked_before_the_first_block(tmp_path: Path) -> None:
    """A fault in the last file shows at once, not after an hour of play."""
    good, bad = npz(tmp_path / "a.npz", [1.0]), tmp_path / "b.npz"
    bad.write_bytes(good.read_bytes()[:-10])
    source = ReplaySource("tape", SETTINGS, [good, bad])
    with pytest.raises(InputError, match=r"b\.npz: is damaged"):
        source.open()


@pytest.mark.parametrize(
    ("options", "says"),
    [
        ({"files": []}, "nothing to play"),
        ({"block_s": 0.0}, "blocks of 0.0 s cannot be"),
        ({"block_s": math.nan}, "blocks of nan s cannot be"),
        ({"piece_every_s": -1.0}, "pieces cannot start every -1.0 s"),
        ({"start_ns": -1}, "the start lies before 1970"),
    ],
)
def test_arguments_that_cannot_be_are_a_configuration_error(tmp_path: Path, options: dict[str, Any], says: str) -> None:
    """What the caller asks for is checked before any file is."""
    files = [npz(tmp_path / "a.npz", [1.0])]
    with pytest.raises(ConfigError, match=says):
        ReplaySource("tape", SETTINGS, **({"files": files, "start_ns": None} | options)).open()


@pytest.mark.parametrize(
    "given",
    [
        {"unit": "mm/s"},
        {"full_scale": 0},
        {"full_scale": math.inf},
        {"rate_hz": 0.5},
        {"rate_hz": 512001},
        {"files": []},
    ],
)
def test_settings_that_cannot_be_are_refused(given: dict[str, Any]) -> None:
    """Units are the four that blocks know, numbers have limits, and no setting is passed over."""
    with pytest.raises(ValidationError):
        ReplaySettings.model_validate({"kind": "replay", **given})


def test_every_setting_is_described() -> None:
    """Editors and the reference show the description, so none may lack."""
    assert all(field.description for field in ReplaySettings.model_fields.values())


def test_every_record_of_a_real_machine_is_played_whole(records: Path) -> None:
    """All samples of every file come out, whatever its shape, rate and unit."""
    files = sorted(records.rglob("*.npz"))
    assert files
    for path in files:
        with np.load(path, allow_pickle=False) as arrays:
            x, fs, unit = arrays["x"], float(arrays["fs"]), str(arrays["unit"])
        source = ReplaySource("tape", ReplaySettings(kind="replay"), [path], block_s=0.73)
        source.open()
        blocks = list(blocks_of(source))
        channels = x.shape[-2] if x.ndim > 1 else 1
        assert {(block.rate_hz, block.unit, block.channels) for block in blocks} == {(fs, unit, channels)}
        samples = [block.samples for block in blocks]
        played = np.stack(samples) if x.ndim == 3 else np.concatenate(samples, axis=1)
        np.testing.assert_array_equal(played.reshape(x.shape), x)
        assert source.seconds == pytest.approx(x.size / channels / fs)
