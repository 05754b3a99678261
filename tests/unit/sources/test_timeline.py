"""Where files that are played one after the other lie in time, and which of them join up."""

from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from humbell.model import Block, ConfigError, InputError, SampleUnit
from humbell.sources import Continuity, Join
from humbell.sources.recording import Header
from humbell.sources.timeline import place
from unit.sources.recorded import START_NS, npz, play

SECOND_NS = 1_000_000_000


def starts(blocks: list[Block]) -> list[int]:
    return [block.start_ns for block in blocks]


def boots(blocks: list[Block]) -> list[str]:
    return [block.boot for block in blocks]


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
    for start_ns in (0, START_NS):
        assert len(set(boots(play(first, second, start_ns=start_ns)))) == 2


@pytest.mark.parametrize(
    "other",
    [
        {"channels": 2},
        {"rate_hz": 2000.0},
        {"unit": SampleUnit.VOLT},
        {"full_scale": 5.0},
        {"full_scale": None},
        {"pieces": 1},
    ],
)
def test_files_that_differ_are_two_runs_though_their_times_meet(other: dict[str, Any]) -> None:
    """A filter cannot run on over another rate, unit or number of channels; pieces join up with nothing."""
    first = Header(Path("a"), 1, 1000.0, SampleUnit.G, 50.0, 500, start_ns=START_NS)
    second = replace(first, path=Path("b"), start_ns=START_NS + SECOND_NS // 2)
    assert [placed.boot for placed in place([first, second], None, None)] == ["0-a", "0-a"]
    assert [placed.boot for placed in place([first, replace(second, **other)], None, None)] == ["0-a", "1-b"]
    changed = replace(first, **other)
    second = replace(second, start_ns=place([changed], None, None)[0].end_ns)
    assert [placed.boot for placed in place([changed, second], None, None)] == ["0-a", "1-b"]


def test_files_out_of_order_are_refused(tmp_path: Path) -> None:
    """A source delivers the oldest first; `file-10` before `file-9` is a slip of the shell's sorting."""
    early, late = (npz(tmp_path / f"{n}.npz", [1], start_ns=START_NS + n) for n in (9, 10))
    with pytest.raises(InputError, match=r"9\.npz: begins before 10\.npz, which it follows"):
        play(late, early)
    assert starts(play(late, early, start_ns=0)) == [0, 1_000_000]


def test_a_dated_file_behind_an_undated_one_is_refused(tmp_path: Path) -> None:
    """Nobody knows how much lies between them, and 1970 is no answer; a start for all settles it."""
    bare, dated = npz(tmp_path / "a.npz", [1, 2]), npz(tmp_path / "b.npz", [1, 2], start_ns=START_NS)
    with pytest.raises(InputError, match=r"b\.npz: has a time of its own, but a\.npz .* \(give a start time for all\)"):
        play(bare, dated)
    assert len(play(bare, dated, start_ns=START_NS)) == 2


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


def test_pieces_cannot_start_before_the_last_one_ended(tmp_path: Path) -> None:
    """An interval shorter than a piece is a slip."""
    with pytest.raises(ConfigError, match=r"pieces of 1 s cannot start every 0\.5 s"):
        play(npz(tmp_path / "a.npz", np.ones((3, 1, 1000))), piece_every_s=0.5)
