"""The task of one source: blocks are handed on, and what is lost is opened again, whatever its driver raises."""

from collections.abc import Callable
from typing import Any, cast

import numpy as np
import pytest
from structlog.testing import capture_logs

from humbell.app import intake as module
from humbell.app.intake import Intake
from humbell.app.make import Driven
from humbell.app.queues import BoundedQueue
from humbell.model import Block, EndOfSource, OutOfReachError, SampleUnit


def block(seq: int) -> Block:
    """Return a quarter of a second."""
    return Block("daq", "a", seq, seq * 250_000_000, 512.0, SampleUnit.G, np.zeros((1, 128)))


class Script:
    """A source that does what is written: blocks are returned, errors raised, and each call is noted."""

    name = "daq"

    def __init__(self, *steps: Block | Exception | None, opens: Exception | None = None) -> None:
        self._steps = list(steps)
        self._opens = opens
        self.calls: list[str] = []

    def open(self) -> None:
        """Open it, or fail."""
        self.calls.append("open")
        if self._opens is not None:
            raise self._opens

    def read(self, _timeout_s: float) -> Block | None:
        """Do the next step."""
        self.calls.append("read")
        step = self._steps.pop(0) if self._steps else None
        if isinstance(step, Exception):
            raise step
        return step

    def close(self) -> None:
        """Close it."""
        self.calls.append("close")


@pytest.fixture(autouse=True)
def _no_pauses(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(module, "_FIRST_PAUSE_S", 0.0)
    monkeypatch.setattr(module, "_TURN_S", 0.0)


def turned(source: Script | Driven, times: int, bound: int = 9) -> tuple[Intake, BoundedQueue[Block]]:
    """Return an intake whose task has done so many rounds, by hand, and where its blocks went."""
    blocks: BoundedQueue[Block] = BoundedQueue("blocks", bound)
    intake = Intake(source, blocks)
    for _ in range(times):
        cast("Any", intake)._turn()  # noqa: SLF001 - instead of a thread and waiting
    return intake, blocks


def taken(blocks: BoundedQueue[Block]) -> list[int]:
    """Return the numbers of the blocks in a queue."""
    return [one.seq for one in iter(lambda: blocks.get(0.0), None)]


def test_blocks_are_handed_on_and_counted() -> None:
    """With the seconds of signal in them; a turn without a block is no trouble."""
    intake, blocks = turned(Script(block(0), None, block(1)), 4)
    assert taken(blocks) == [0, 1]
    state = intake.state
    assert (state.state, state.trouble, state.blocks, state.seconds, state.opened) == ("open", "", 2, 0.5, 1)
    assert state.age_s is not None
    assert intake.silent_s >= 0


def test_a_block_that_finds_no_room_waits_and_the_source_with_it() -> None:
    """Nothing is dropped, and nothing is read that would have to be."""
    source = Script(block(0), block(1), block(2))
    intake, blocks = turned(source, 5, bound=1)
    assert source.calls == ["open", "read", "read"]
    assert taken(blocks) == [0]
    cast("Any", intake)._turn()  # noqa: SLF001 - as above
    assert taken(blocks) == [1]


@pytest.mark.parametrize(
    ("error", "trouble"),
    [
        (OutOfReachError("the cable is out (plug it in)"), "the cable is out (plug it in)"),
        (OSError("no such device"), "sources.daq: OSError: no such device (see its driver)"),
        (ZeroDivisionError("oh"), "sources.daq: ZeroDivisionError: oh (see its driver)"),
    ],
)
def test_a_lost_source_is_closed_and_opened_again(error: Exception, trouble: str) -> None:
    """Whatever it raised: a new start may help, and nothing else would."""
    source = Script(error, block(0))
    with capture_logs() as logs:
        intake, blocks = turned(source, 1)
        assert (intake.state.state, intake.state.trouble) == ("away", trouble)
        cast("Any", intake)._turn()  # noqa: SLF001 - as above
    assert source.calls == ["open", "read", "close", "open", "read"]
    assert taken(blocks) == [0]
    assert (intake.state.state, intake.state.trouble, intake.state.opened) == ("open", "", 2)
    assert [one["event"] for one in logs] == ["source_open", "source_away"]


def test_a_source_that_can_be_opened_but_never_read_fills_no_log() -> None:
    """The same trouble is told once, until blocks come again."""
    error = OSError("no such device")
    with capture_logs() as logs:
        turned(Script(*[error] * 20, block(0), error), 22)
    assert [one["event"] for one in logs].count("source_away") == 2


def test_an_end_is_no_loss() -> None:
    """There is nothing more to come."""
    with capture_logs():
        intake, blocks = turned(Script(block(0), EndOfSource()), 2)
    assert intake.ended
    assert taken(blocks) == [0]


def make(*found: Script | Exception) -> Callable[[], Script]:
    """Return what makes these sources, or fails to, one after the other."""
    rest = list(found)

    def create() -> Script:
        one = rest.pop(0)
        if isinstance(one, Exception):
            raise one
        return one

    return create


def test_a_driver_that_cannot_be_made_is_tried_again() -> None:
    """As one that cannot be opened: the device may be plugged in later."""
    script = Script(block(0))
    driven = Driven("daq", make(KeyError("serial number"), script))
    with capture_logs():
        intake, blocks = turned(driven, 1)
        assert intake.state.trouble == "sources.daq: KeyError: 'serial number' (see its driver)"
        cast("Any", intake)._turn()  # noqa: SLF001 - as above
    assert taken(blocks) == [0]
    intake.close()
    assert script.calls == ["open", "read", "close"]
    assert driven.counters is None


def test_a_driver_is_made_once() -> None:
    """Opened again, it is the same one."""
    script = Script(OSError(), block(0))
    with capture_logs():
        _, blocks = turned(Driven("daq", make(script)), 2)
    assert taken(blocks) == [0]


def test_a_driver_that_was_never_opened_cannot_be_read() -> None:
    """That is a mistake of the caller; closing it is none."""
    driven = Driven("daq", make())
    driven.close()
    with pytest.raises(RuntimeError, match="source daq is not open"):
        driven.read(0.0)
