"""Replay: blocks, times and runs of files that are played as one source; and damage of every kind."""

import math
import warnings
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from numpy.typing import ArrayLike
from pydantic import ValidationError
from scipy.io import wavfile

from humbell.model import Block, ConfigError, HumbellError, InputError, SampleUnit
from humbell.sources import Continuity, EndOfSource, Join, ReplaySettings, ReplaySource

SETTINGS = ReplaySettings(kind="replay", unit=SampleUnit.G, full_scale=50.0)
START_NS = 1_772_359_200_000_000_000  # 2026-03-01T10:00:00Z
SECOND_NS = 1_000_000_000


def npz(path: Path, x: ArrayLike, fs: float = 1000.0, **more: ArrayLike) -> Path:
    """Write an NPZ file in g."""
    arrays: dict[str, Any] = {"x": x, "fs": fs, "unit": "g"} | more
    np.savez(path, **arrays)
    return path


def play(
    *files: Path, start_ns: int | None = None, block_s: float = 0.25, piece_every_s: float | None = None
) -> list[Block]:
    """Return all blocks."""
    source = ReplaySource("tape", SETTINGS, files, start_ns, block_s, piece_every_s=piece_every_s)
    source.open()
    return list(blocks_of(source))


def blocks_of(source: ReplaySource) -> Iterator[Block]:
    while True:
        try:
            block = source.read(0.0)
        except EndOfSource:
            return
        assert block is not None
        yield block


def starts(blocks: list[Block]) -> list[int]:
    return [block.start_ns for block in blocks]


def boots(blocks: list[Block]) -> list[str]:
    return [block.boot for block in blocks]


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
    path = npz(tmp_path / "a.npz", np.arange(5000), rate_hz, start_ns=START_NS)
    for block_s in (0.001, 0.01, 0.25):
        for block in play(path, block_s=block_s):
            number = int(block.samples[0, 0])
            assert block.start_ns == START_NS + round(number * 1e9 / rate_hz)


def test_the_start_is_the_callers_then_the_files_then_1970(tmp_path: Path) -> None:
    """A start that was asked for is taken before the file's own, and without either it is the epoch."""
    bare, dated = npz(tmp_path / "a.npz", [1, 2]), npz(tmp_path / "b.npz", [1, 2], start_ns=START_NS)
    assert play(bare)[0].start_ns == 0
    assert play(dated)[0].start_ns == START_NS
    assert play(dated, start_ns=5)[0].start_ns == 5


def test_files_without_times_follow_one_another_but_do_not_join_up(tmp_path: Path) -> None:
    """Each starts where the last one ended, with a boot id of its own, since nobody says that they belong together."""
    files = [npz(tmp_path / f"{name}.npz", np.ones(500)) for name in "ab"]
    blocks = play(*files, block_s=0.5, start_ns=START_NS)
    assert starts(blocks) == [START_NS, START_NS + SECOND_NS // 2]
    assert boots(blocks) == ["0-a.npz", "1-b.npz"]
    assert [block.seq for block in blocks] == [0, 1]


def test_a_recording_that_was_split_by_its_recorder_is_one_run(tmp_path: Path) -> None:
    """Files whose own times meet within half a sample keep the boot id, and so their filters run on."""
    half_sample_ns = 500_000
    for away_ns, one_run in ((0, True), (half_sample_ns, True), (-half_sample_ns, True), (half_sample_ns + 1, False)):
        first = npz(tmp_path / "a.npz", np.ones(500), start_ns=START_NS)
        second = npz(tmp_path / "b.npz", np.ones(500), start_ns=START_NS + SECOND_NS // 2 + away_ns)
        blocks = play(first, second, block_s=0.5)
        assert blocks[1].start_ns == START_NS + SECOND_NS // 2 + away_ns
        assert (len(set(boots(blocks))) == 1) is one_run
        continuity = Continuity()
        expected = Join.CONTINUES if one_run else Join.RESTART
        assert [continuity.feed(block).join for block in blocks] == [Join.FIRST, expected]


def test_a_start_for_all_files_parts_those_that_were_one_run(tmp_path: Path) -> None:
    """The files' own times do not count where a start is given, so they cannot show that two files meet."""
    first = npz(tmp_path / "a.npz", np.ones(500), start_ns=START_NS)
    second = npz(tmp_path / "b.npz", np.ones(500), start_ns=START_NS + SECOND_NS // 2)
    assert len(set(boots(play(first, second, start_ns=0)))) == 2


@pytest.mark.parametrize(
    ("x", "fs"), [(np.ones((2, 500)), 1000.0), (np.ones(1000), 2000.0), (np.ones((1, 1, 500)), 1000.0)]
)
def test_another_rate_or_number_of_channels_is_another_run(tmp_path: Path, x: ArrayLike, fs: float) -> None:
    """Files may differ, but then they do not join up, even where their times do."""
    first = npz(tmp_path / "a.npz", np.ones(500), start_ns=START_NS)
    second = npz(tmp_path / "b.npz", x, fs, start_ns=START_NS + SECOND_NS // 2)
    assert boots(play(first, second, block_s=0.5)) == ["0-a.npz", "1-b.npz"]


def test_files_out_of_order_are_refused(tmp_path: Path) -> None:
    """A source delivers the oldest first; `file-10` before `file-9` is a slip of the shell's sorting."""
    early, late = (npz(tmp_path / f"{n}.npz", [1], start_ns=START_NS + n) for n in (9, 10))
    with pytest.raises(InputError, match=r"9\.npz: begins before 10\.npz, which it follows"):
        play(late, early)
    assert starts(play(late, early, start_ns=0)) == [0, 1_000_000]


def test_pieces_lie_as_the_caller_says_or_the_file_or_end_to_end(tmp_path: Path) -> None:
    """An interval that was asked for counts most, then the file's own times, then one piece follows the other."""
    x = np.arange(3 * 100).reshape(3, 1, 100)
    own = [START_NS, START_NS + 600 * SECOND_NS, START_NS + 1300 * SECOND_NS]
    bare, dated = npz(tmp_path / "a.npz", x), npz(tmp_path / "b.npz", x, piece_start_ns=own)
    assert starts(play(bare)) == [0, SECOND_NS // 10, 2 * SECOND_NS // 10]
    assert starts(play(bare, piece_every_s=10.0, start_ns=7)) == [7, 7 + 10 * SECOND_NS, 7 + 20 * SECOND_NS]
    assert starts(play(dated)) == own
    assert starts(play(dated, start_ns=7)) == [7, 7 + 600 * SECOND_NS, 7 + 1300 * SECOND_NS]
    assert starts(play(dated, piece_every_s=10.0)) == [START_NS + k * 10 * SECOND_NS for k in range(3)]


def test_a_file_of_pieces_ends_one_interval_behind_its_last_piece(tmp_path: Path) -> None:
    """Two files of the same sensor keep its rhythm where they are played one behind the other."""
    files = [npz(tmp_path / f"{name}.npz", np.ones((2, 1, 100))) for name in "ab"]
    assert starts(play(*files, piece_every_s=10.0)) == [k * 10 * SECOND_NS for k in range(4)]


def test_a_piece_is_one_block_and_marked_as_one(tmp_path: Path) -> None:
    """A piece is never cut, whatever block_s is."""
    blocks = play(npz(tmp_path / "a.npz", np.ones((3, 2, 1000))), block_s=0.01)
    assert [(block.piece, block.length, block.channels) for block in blocks] == [(True, 1000, 2)] * 3


def test_pieces_cannot_start_before_the_last_one_ended(tmp_path: Path) -> None:
    """An interval shorter than a piece is a slip."""
    with pytest.raises(ConfigError, match=r"pieces of 1 s cannot start every 0\.5 s"):
        play(npz(tmp_path / "a.npz", np.ones((3, 1, 1000))), piece_every_s=0.5)


def test_what_the_files_hold_is_known_once_the_source_is_open(tmp_path: Path) -> None:
    """Progress and checks need rates, lengths and the seconds of signal, the time between pieces not among them."""
    files = [
        npz(tmp_path / "a.npz", np.ones((2, 500)), start_ns=START_NS),
        npz(tmp_path / "b.npz", np.ones((3, 1, 4000)), 2000.0),
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


def damaged(whole: bytes, rng: np.random.Generator) -> bytes:
    """Return *whole* cut off, or with some bytes changed: anywhere, or among the first 200, where the headers are."""
    if rng.random() < 0.3:
        return whole[: rng.integers(len(whole))]
    content = bytearray(whole)
    reach = len(content) if rng.random() < 0.5 else 200
    for at in rng.integers(reach, size=rng.integers(1, 5)):
        content[at] = rng.integers(256)
    return bytes(content)


@pytest.mark.parametrize("kind", ["int16", "int24", "float32", "stored", "deflated", "pieces"])
def test_damage_of_any_kind_is_one_error_of_ours_or_none(
    tmp_path: Path, kind: str, capfd: pytest.CaptureFixture[str]
) -> None:
    """Whatever the bytes are, opening and playing raises nothing else, prints nothing and warns of nothing."""
    rng = np.random.default_rng(20260301)
    path = tmp_path / ("a.wav" if kind in {"int16", "int24", "float32"} else "a.npz")
    x = rng.standard_normal((2, 400))
    if kind == "float32":
        wavfile.write(path, 1000, x.T.astype(np.float32))
    elif kind in {"int16", "int24"}:
        wavfile.write(path, 1000, (x.T * 1000).astype(np.int16 if kind == "int16" else np.int32))
    elif kind == "deflated":
        np.savez_compressed(path, x=x, fs=1000.0, unit="g", start_ns=START_NS)
    else:
        npz(path, x.reshape(4, 2, 100) if kind == "pieces" else x, start_ns=START_NS)
    whole = path.read_bytes()
    if kind == "int24":
        # 800 samples of four bytes are 1066 of three and a bit; cut to 800 of three, in the format and the two sizes.
        body = whole[44 : 44 + 2400]
        whole = whole[:4] + (36 + 2400).to_bytes(4, "little") + whole[8:28] + (6000).to_bytes(4, "little")
        whole += (6).to_bytes(2, "little") + (24).to_bytes(2, "little") + b"data" + (2400).to_bytes(4, "little") + body
    path.write_bytes(whole)
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
