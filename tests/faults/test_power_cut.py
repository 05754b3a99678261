"""
Row 8: the power is cut while the journal is written to.

The journal lies on an ext4 image behind a loop device. The image itself lies on a second file system, which is frozen
in the middle of the writing: what the image holds then is what a device holds in that moment. Caches of the kernel do
not count, as in a real power cut; a device that forgets what it said was flushed is not simulated.
"""

import shutil
import subprocess
import threading
import time
from collections import defaultdict
from collections.abc import Generator
from contextlib import closing
from pathlib import Path

import numpy as np
import pytest

from faults.disks import from_image, frozen, make_image
from faults.load import CHUNK_POINTS, CHUNK_S, JUDGED, SECOND_NS, START_NS, Simulated, journal, start
from faults.rows import Figure, report
from humbell.journal import open_for_reading, readings, transitions

WITHIN_S = 30.0
MANY = 10**9


class Told:
    """
    What a writer has said so far.

    Args:
        process: the writer.
    """

    def __init__(self, process: subprocess.Popen[str]) -> None:
        self.numbers = {"begun": -1, "told": -1, "committed": -1}
        self._output = process.stdout
        self._thread = threading.Thread(target=self._read)
        self._thread.start()

    def wait_for(self, what: str, number: int) -> None:
        """Return when the writer has come so far."""
        until_s = time.monotonic() + WITHIN_S
        while self.numbers[what] < number:
            assert time.monotonic() < until_s, f"nothing {what}"
            time.sleep(0.01)

    def join(self) -> None:
        """Read to the end, which comes with the writer's."""
        self._thread.join()

    def _read(self) -> None:
        for line in self._output or ():
            what, number = line.split()
            self.numbers[what] = int(number)


def cut(folder: Path, trials: int) -> Generator[tuple[Path, dict[str, int]]]:
    """Let a writer write, cut its power at moments drawn at random, and yield what its device held and it had said."""
    draw = np.random.default_rng(8)
    make_image(folder / "outer.img", 160)
    with from_image(folder / "outer.img", folder / "outer"):
        image = folder / "outer" / "device.img"
        make_image(image, 64)
        with from_image(image, folder / "device"), start("write", folder / "device") as writer:
            told = Told(writer)
            try:
                told.wait_for("committed", 2)
                for trial in range(trials):
                    time.sleep(draw.uniform(0.05, 0.5))
                    known = dict(told.numbers)
                    with frozen(folder / "outer"):
                        copy = Path(shutil.copyfile(image, folder / f"cut-{trial}.img"))
                    yield copy, known
                    copy.unlink()
            finally:
                writer.kill()
                told.join()
    (folder / "outer.img").unlink()


def found(image: Path, folder: Path) -> tuple[int, int]:
    """Start again with what a cut left, and return how many transitions and chunks are there, each whole."""
    with from_image(image, folder):
        kept = journal(folder, Simulated())
        assert kept.open().put_aside is None
        with open_for_reading(kept.settings.path) as connection:
            assert connection.execute("PRAGMA integrity_check").fetchone()[0] == "ok"
            numbers = [round(stored.transition.value) for stored in transitions(connection, limit=MANY)]
            seconds: dict[tuple[str, str, str], list[int]] = defaultdict(list)
            for one in readings(connection):
                seconds[one.machine, one.point, one.measure].append(round((one.time_ns - START_NS) / SECOND_NS))
        kept.close()
    assert numbers == list(range(len(numbers)))
    assert len(seconds) == CHUNK_POINTS * len(JUDGED)
    (lengths,) = {len(some) for some in seconds.values()}
    assert all(some == list(range(1, lengths + 1)) for some in seconds.values())
    chunks, rest = divmod(lengths, CHUNK_S)
    assert rest == 0
    return len(numbers), chunks


def assert_power_cuts_cost_nothing_that_counted(folder: Path, trials: int, figure: Figure) -> None:
    """Cut the power so many times, and look after each."""
    told, most_lost = 0, 0
    with closing(cut(folder, trials)) as cuts:
        for image, known in cuts:
            there, chunks = found(image, folder / "after")
            assert there > known["told"]
            assert chunks > known["committed"]
            lost = max(0, known["begun"] + 1 - chunks)
            assert lost <= 1
            told, most_lost = known["told"] + 1, max(most_lost, lost)
    report(
        figure,
        8,
        f"power cut x {trials} under load",
        "clean or quarantined journal, 0 transitions lost, readings <= one batch",
        f"clean every time, 0 of {told} transitions lost, readings {most_lost} batch",
    )


@pytest.mark.slow
def test_a_power_cut_costs_nothing_that_counted(tmp_path: Path, figure: Figure) -> None:
    """Each transition that was told before is there, and of the readings at most the chunk in the making is not."""
    assert_power_cuts_cost_nothing_that_counted(tmp_path, 4, figure)


@pytest.mark.long
def test_twenty_power_cuts_cost_nothing_that_counted(tmp_path: Path, figure: Figure) -> None:
    """The same, at more moments and with a longer journal."""
    assert_power_cuts_cost_nothing_that_counted(tmp_path, 20, figure)
