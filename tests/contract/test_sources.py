"""The contract of every source: one suite, run over a factory for each kind."""

import time
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from itertools import pairwise
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy.io import wavfile

from humbell.model import Block, SampleUnit
from humbell.sources import Continuity, EndOfSource, Join, ReplaySettings, ReplaySource, Source
from humbell_sim.plugin import plugin
from humbell_sim.settings import TarnholmSettings
from humbell_sim.tarnholm import renderer

START_NS = 1_772_359_200_000_000_000  # 2026-03-01T10:00:00Z
RATE_HZ = 4000


@dataclass(frozen=True)
class Case:
    """
    One source and what it must deliver.

    Args:
        make: returns a new source whose blocks are this many seconds long.

        truth: (channels, n), or (pieces, channels, n), in *unit*.

        unit: of the truth.
    """

    make: Callable[[float], Source]
    truth: NDArray[Any]
    unit: SampleUnit

    @property
    def pieces(self) -> bool:
        """Whether the source delivers pieces."""
        return self.truth.ndim == 3


def signal(*shape: int) -> NDArray[np.float64]:
    """Return noise of about 1, the same every time."""
    return np.random.default_rng(1).standard_normal(shape)


def replay_wav(folder: Path) -> Case:
    counts = (signal(3, 3001) * 5000).round().astype(np.int16)
    path = folder / "a.wav"
    wavfile.write(path, RATE_HZ, counts.T)
    settings = ReplaySettings(kind="replay", unit=SampleUnit.G, full_scale=80.0)
    return Case(
        lambda block_s: ReplaySource("src", settings, [path], START_NS, block_s), counts * (80.0 / 2**15), SampleUnit.G
    )


def replay_stream(folder: Path) -> Case:
    x = signal(2, 3001).astype(np.float32)
    path = folder / "a.npz"
    np.savez(path, x=x, fs=float(RATE_HZ), unit="m/s2", start_ns=START_NS)
    make = lambda block_s: ReplaySource("src", ReplaySettings(kind="replay"), [path], None, block_s)  # noqa: E731
    return Case(make, x, SampleUnit.METRES_PER_SECOND_SQUARED)


def replay_split(folder: Path) -> Case:
    x = (signal(1, 3001) * 5000).round().astype(np.int32)
    paths = []
    for number, first in enumerate((0, 1000, 2000)):
        paths.append(folder / f"{number}.npz")
        start_ns = START_NS + first * 1_000_000_000 // RATE_HZ
        part = x[:, first : first + 1000 if number < 2 else None]
        np.savez(paths[-1], x=part, fs=RATE_HZ, unit="counts", start_ns=start_ns)
    make = lambda block_s: ReplaySource("src", ReplaySettings(kind="replay"), paths, None, block_s)  # noqa: E731
    return Case(make, x, SampleUnit.COUNTS)


def replay_pieces(folder: Path) -> Case:
    x = signal(5, 2, 400)
    path = folder / "a.npz"
    np.savez(path, x=x, fs=RATE_HZ, unit="V", piece_start_ns=START_NS + np.arange(5) * 600_000_000_000)
    make = lambda block_s: ReplaySource("src", ReplaySettings(kind="replay"), [path], None, block_s)  # noqa: E731
    return Case(make, x, SampleUnit.VOLT)


def tarnholm_plug_in(_folder: Path) -> Case:
    def make(block_s: float) -> Source:
        settings = TarnholmSettings(
            kind="tarnholm", channels=2, rate_hz=RATE_HZ, pace=0, seconds=3001 / RATE_HZ, block_s=min(block_s, 10.0)
        )
        return plugin.create("src", settings, time.monotonic, lambda: START_NS)

    return Case(make, renderer(seed=1, count=2, rate_hz=RATE_HZ).render(0, 3001), SampleUnit.G)


@pytest.fixture(params=[replay_wav, replay_stream, replay_split, replay_pieces, tarnholm_plug_in])
def case(request: pytest.FixtureRequest, tmp_path: Path) -> Case:
    """One case for each kind of source."""
    made: Case = request.param(tmp_path)
    return made


def read_all(source: Source) -> Iterator[Block]:
    """Yield blocks to the end; a source that cannot end is given up after 100,000 reads."""
    for _ in range(100_000):
        try:
            block = source.read(0.1)
        except EndOfSource:
            return
        if block is not None:
            yield block
    raise AssertionError


def played(case: Case, block_s: float) -> list[Block]:
    source = case.make(block_s)
    source.open()
    blocks = list(read_all(source))
    source.close()
    return blocks


@pytest.mark.parametrize("block_s", [0.0001, 0.0137, 0.25, 100.0])
def test_the_blocks_together_are_the_signal_however_it_is_cut(case: Case, block_s: float) -> None:
    """Every sample comes exactly once, in order, whatever the length of the blocks."""
    samples = [block.samples for block in played(case, block_s)]
    whole = np.stack(samples) if case.pieces else np.concatenate(samples, axis=1)
    np.testing.assert_array_equal(whole, case.truth)


@pytest.mark.parametrize("block_s", [0.0001, 0.0137, 0.25])
def test_blocks_join_up_by_time_and_number(case: Case, block_s: float) -> None:
    """Numbers rise by one; each block of a stream starts where the last ended, to the rounding of a nanosecond."""
    blocks = played(case, block_s)
    assert blocks[0].start_ns == START_NS
    for before, after in pairwise(blocks):
        assert after.seq == before.seq + 1
        assert after.start_ns >= before.end_ns - 1
        if not case.pieces:
            assert abs(after.start_ns - before.end_ns) <= 1


def test_continuity_finds_one_unbroken_run(case: Case) -> None:
    """What was recorded without a break is told as unbroken, and all its samples are counted."""
    continuity = Continuity(tolerance_s=1e-6)
    joins = [continuity.feed(block).join for block in played(case, 0.05)]
    expected = [Join.PIECE] * 2 if case.pieces else [Join.FIRST, Join.CONTINUES]
    assert joins[0] is expected[0]
    assert set(joins[1:]) == {expected[1]}
    assert continuity.acquired_samples == case.truth.size // case.truth.shape[-2]
    assert continuity.missing_samples == 0


def test_each_block_says_what_it_is(case: Case) -> None:
    """Source, unit, rate, channels and whether it is a piece are right on every block."""
    for block in played(case, 0.1):
        assert block.source == case.make(0.1).name == "src"
        assert block.unit is case.unit
        assert block.rate_hz == RATE_HZ
        assert block.channels == case.truth.shape[-2]
        assert block.length > 0
        assert block.piece is case.pieces
        assert block.boot


def test_samples_are_read_only_and_of_a_known_type(case: Case) -> None:
    """Stages share a block's samples, so none may change them, and they know four types in native order."""
    for block in played(case, 0.1):
        assert not block.samples.flags.writeable
        with pytest.raises(ValueError, match="read-only"):
            block.samples[0, 0] = 0
        assert block.samples.dtype in (np.float64, np.float32, np.int32, np.int16)
        assert block.samples.dtype.isnative


def test_the_end_stays_the_end(case: Case) -> None:
    """Reading on behind the end tells the end again."""
    source = case.make(0.25)
    source.open()
    list(read_all(source))
    for _ in range(3):
        with pytest.raises(EndOfSource):
            source.read(0.0)
    source.close()


def test_closing_twice_is_no_fault_and_blocks_outlive_it(case: Case) -> None:
    """A source may be closed before it was opened, in the middle and twice; blocks that were read stay good."""
    source = case.make(0.05)
    source.close()
    source.open()
    first = source.read(0.0)
    source.close()
    source.close()
    assert first is not None
    truth = case.truth[0] if case.pieces else case.truth[:, : first.length]
    np.testing.assert_array_equal(first.samples, truth)


def test_a_source_can_be_opened_again(case: Case) -> None:
    """After a close, a recorded source begins at its beginning."""
    source = case.make(0.05)
    for _ in range(2):
        source.open()
        blocks = list(read_all(source))
        assert blocks[0].start_ns == START_NS
        assert sum(block.length for block in blocks) == case.truth.size // case.truth.shape[-2]
        source.close()


def test_a_closed_source_is_not_read(case: Case) -> None:
    """Reading without opening is a mistake of the program, and says so."""
    with pytest.raises(RuntimeError, match="is not open"):
        case.make(0.25).read(0.0)
