"""`humbell replay` over files of every kind: what is asked of them, and what is refused, each with one clear line."""

import functools
import json
from collections.abc import Callable
from datetime import datetime
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from humbell.app import replay as app_replay
from humbell.sources import ReplaySource
from system.console import CONFIG, RATE_HZ, SECONDS, Done, call, config, npz, vibration, wav

ANY_UNIT = CONFIG.replace(", unit: m/s2", "")


def replay(folder: Path, *more: str | Path, text: str = CONFIG) -> Done:
    """Run the command with a configuration in *folder*."""
    return call("replay", config(folder, text), *more)


def told(done: Done, kind: str) -> list[dict[str, Any]]:
    """Return what was printed of one kind."""
    assert (done.code, done.err) == (0, "")
    return [one for one in map(json.loads, done.lines) if one["kind"] == kind]


def in_order(readings: list[dict[str, Any]]) -> bool:
    """Return whether *readings* are in order of time."""
    times = [datetime.fromisoformat(one["time"]) for one in readings]
    return times == sorted(times)


def damaged(path: Path, keep: float) -> Path:
    """Cut off the end of a file."""
    content = path.read_bytes()
    path.write_bytes(content[: round(len(content) * keep)])
    return path


def renamed(path: Path, suffix: str) -> Path:
    """Give a file the ending of another type."""
    return path.rename(path.with_suffix(suffix))


def empty(path: Path) -> Path:
    """Make a file of no bytes."""
    path.touch()
    return path


# What is played, exit code, and what the one line says behind the file's name.
REFUSED: dict[str, tuple[Callable[[Path], Path], int, str]] = {
    "missing": (lambda folder: folder / "gone.wav", 3, "no such file (check the path)"),
    "empty npz": (lambda folder: empty(folder / "a.npz"), 3, "is empty (record or copy it again)"),
    "empty wav": (lambda folder: empty(folder / "a.wav"), 3, "is empty (record or copy it again)"),
    "truncated npz": (lambda folder: damaged(npz(folder / "a.npz", vibration(2)), 0.5), 3, "is damaged: "),
    "truncated wav": (lambda folder: damaged(wav(folder / "a.wav", vibration(2)), 0.5), 3, "is cut off, "),
    "a WAV file named npz": (
        lambda folder: renamed(wav(folder / "a.wav", vibration(2)), ".npz"),
        3,
        "is no NPZ file (a WAV file: name it .wav)",
    ),
    "an NPZ file named wav": (
        lambda folder: renamed(npz(folder / "a.npz", vibration(2)), ".wav"),
        3,
        "is no WAV file (an NPZ file: name it .npz)",
    ),
    "another type": (config, 3, "is neither .wav nor .npz (save it as one of them)"),
    "a folder": (lambda folder: folder, 3, "is neither .wav nor .npz (save it as one of them)"),
    "no samples, npz": (lambda folder: npz(folder / "a.npz", np.zeros(0)), 3, "x holds no samples, "),
    "no samples, wav": (lambda folder: wav(folder / "a.wav", np.zeros((1, 0), np.float32)), 3, "holds no samples "),
    "65 channels, npz": (lambda folder: npz(folder / "a.npz", np.zeros((65, 99))), 3, "x, (65, 99), has 65 channels, "),
    "65 channels, wav": (
        lambda folder: wav(folder / "a.wav", np.zeros((65, 99), np.float32)),
        3,
        "has 65 channels, more than 64 (split it)",
    ),
    "complex numbers": (lambda folder: npz(folder / "a.npz", np.zeros(9, complex)), 3, "x is of type complex128, "),
    "objects": (lambda folder: npz(folder / "a.npz", np.array([{}])), 3, "x.npy holds objects, which are never loaded"),
    "four axes": (lambda folder: npz(folder / "a.npz", np.zeros((1, 1, 1, 9))), 3, "x has 4 axes "),
    "another unit": (lambda folder: npz(folder / "a.npz", vibration(2), unit="g"), 3, "is in g, the settings say m/s2"),
    "a rate that is none": (lambda folder: npz(folder / "a.npz", vibration(2), fs=np.nan), 3, "fs is no finite number"),
    "a rate too low": (
        lambda folder: npz(folder / "a.npz", vibration(2), fs=2000.0),
        2,
        (
            "machines.p-101.points.de-h.velocity.band_hz: 2000 Hz carries a band up to 781.2 Hz, not to 1000 Hz "
            "(give band_hz: [10, 781.2], or leave the band out by velocity: off, or sample at 2560 Hz or more)"
        ),
    ),
    "PCM without a range": (
        lambda folder: wav(folder / "a.wav", np.zeros((1, 99), np.int16)),
        2,
        "PCM samples need a full scale to become m/s2 (set sources.tape.full_scale to ",
    ),
}


@pytest.mark.parametrize("name", REFUSED)
def test_a_file_that_cannot_be_played_is_refused_in_one_line(tmp_path: Path, name: str) -> None:
    """File, what is wrong and what to do; code 3 for a file that is not what it should be, 2 for what was set."""
    make, code, said = REFUSED[name]
    path = make(tmp_path)
    done = replay(tmp_path, path, "--json")
    assert (done.code, done.out) == (code, "")
    (line,) = done.err.splitlines()
    assert line.startswith(f"{path}: {said}")
    assert line.endswith(")")


def test_a_bad_file_behind_a_good_one_is_refused_before_anything_is_printed(tmp_path: Path) -> None:
    """Nobody has to throw away half an answer."""
    good, bad = npz(tmp_path / "a.npz", vibration(2)), empty(tmp_path / "b.npz")
    done = replay(tmp_path, good, bad, "--json")
    assert (done.code, done.out) == (3, "")
    assert done.err == f"{bad}: is empty (record or copy it again)\n"


@pytest.mark.parametrize(
    ("x", "seconds"),
    [
        (np.zeros(1), {"no_samples": 1 / RATE_HZ}),
        (np.zeros((1, RATE_HZ), np.int8), {"sensor_fault": 1.0}),
        (np.full((1, RATE_HZ), np.nan), {"sensor_fault": 1.0}),
        (vibration(2).astype(np.float16), {"settling": 1.0, "measured": 1.0}),
    ],
)
def test_an_odd_file_is_played_for_what_it_is(tmp_path: Path, x: Any, seconds: dict[str, float]) -> None:  # noqa: ANN401
    """One sample is no frame, zeros and no numbers are a dead sensor, and a rare type of number is one."""
    done = replay(tmp_path, npz(tmp_path / "a.npz", x), "--json")
    (coverage,) = told(done, "coverage")
    assert coverage["seconds"] == pytest.approx(seconds, rel=1e-5)


def test_samples_in_volts_need_a_sensitivity(tmp_path: Path) -> None:
    """What is missing, where it belongs; with it the values are the same."""
    volts = npz(tmp_path / "v.npz", vibration(3) / np.float32(98.0665), unit="V")
    done = replay(tmp_path, volts, text=ANY_UNIT)
    assert done.code == 2
    assert done.err == (
        f"{volts}: machines.p-101.points.de-h.sensitivity: samples in V need a sensitivity "
        "(give sensitivity: {mV_per_g: ...})\n"
    )
    text = ANY_UNIT.replace("mount: stud", "mount: stud\n        sensitivity: {mV_per_g: 100}")
    assert told(replay(tmp_path, volts, "--json", text=text), "reading")[1]["value"] == pytest.approx(2.0, rel=0.01)


@pytest.mark.parametrize("channel", ["1", "tape/1"])
def test_a_point_takes_another_channel_on_demand(tmp_path: Path, channel: str) -> None:
    """`--point p-101/de-h=1` and `=tape/1` are the same: the second channel of the file, of 1 mm/s."""
    done = replay(tmp_path, npz(tmp_path / "a.npz", vibration()), "--json", "--point", f"p-101/de-h={channel}")
    values = [one["value"] for one in told(done, "reading")]
    assert values[1:12] == pytest.approx([1.0] * 11, rel=0.02)


@pytest.mark.parametrize(
    ("options", "said"),
    [
        (
            ["--point", "p-101/de-h=2"],
            "{file}: machines.p-101.points.de-h.channel: tape/2 does not exist: tape delivers 2",
        ),
        (["--point", "p-109/de-h=0"], "--point p-109/de-h: there is no such point (known: p-101/de-h)"),
        (["--point", "p-101/de-h=disk/0"], "--point p-101/de-h=disk/0: the files are source tape (give tape/0)"),
        (["--point", "p-101/de-h"], "--point p-101/de-h: has another form (give MACHINE/POINT=CHANNEL, "),
        (["--point", "p-101/de-h=x"], "--point p-101/de-h=x: 'x' is no channel (give SOURCE/NUMBER, "),
        (["--start", "2026-03-01T10:00:00"], "--start 2026-03-01T10:00:00: has no zone (add Z for UTC, or an offset "),
        (["--start", "yesterday"], "--start yesterday: is no time (give one such as 2026-03-01T10:00:00Z)"),
        (["--start", "1969-12-31T23:59:59Z"], "sources.tape: the start lies before 1970 (give a later one)"),
        (["--start", "9999-12-31T23:59:59Z"], "the replay would end in the year 2200 or later "),
        (["--piece-every", "0"], "sources.tape: pieces cannot start every 0.0 s (give a time above 0)"),
    ],
)
def test_an_option_that_cannot_be_is_told_in_one_line(tmp_path: Path, options: list[str], said: str) -> None:
    """Exit code 2, what was given, and what to give."""
    path = npz(tmp_path / "a.npz", vibration(2))
    done = replay(tmp_path, path, *options, "--json")
    assert (done.code, done.out) == (2, "")
    (line,) = done.err.splitlines()
    assert line.startswith(said.format(file=path))
    assert line.endswith(")")


@pytest.mark.parametrize(
    ("start", "first"),
    [
        ("2026-03-01T10:00:00Z", "2026-03-01T10:00:01Z"),
        ("2026-03-01T11:30:00.25+01:00", "2026-03-01T10:30:01.25Z"),
        ("2026-02-28T23:00:00-01:30", "2026-03-01T00:30:01Z"),
    ],
)
def test_a_start_with_a_zone_moves_all_times(tmp_path: Path, start: str, first: str) -> None:
    """Whatever the zone, times are printed in UTC."""
    done = replay(tmp_path, npz(tmp_path / "a.npz", vibration(2)), "--json", "--start", start)
    assert told(done, "reading")[0]["time"] == first


def test_several_files_are_played_one_after_the_other(tmp_path: Path) -> None:
    """In the order given and in order of time; their seconds add up, and the filter starts anew in each."""
    files = [npz(tmp_path / "a.npz", vibration()), wav(tmp_path / "b.wav", vibration(3.0))]
    done = replay(tmp_path, *files, "--json")
    readings = told(done, "reading")
    assert in_order(readings)
    assert readings[-1]["time"] == "1970-01-01T00:00:15.5Z"
    assert [one["cause"] for one in readings].count("settling") == 2
    (coverage,) = told(done, "coverage")
    assert sum(coverage["seconds"].values()) == SECONDS + 3.0


def test_a_stream_and_pieces_come_in_order_of_time(tmp_path: Path) -> None:
    """The last frame of the stream is not held back until the pieces behind it are over."""
    pieces = np.stack([vibration(2)] * 3)
    files = [npz(tmp_path / "a.npz", vibration(4.5)), npz(tmp_path / "b.npz", pieces)]
    done = replay(tmp_path, *files, "--json", "--piece-every", "600")
    readings = told(done, "reading")
    assert in_order(readings)
    assert readings[-1]["time"] == "1970-01-01T00:20:06.5Z"
    (coverage,) = told(done, "coverage")
    assert sum(coverage["seconds"].values()) == 4.5 + 3 * 2


@pytest.mark.parametrize("block_s", [0.001, 0.033, 100.0])
def test_how_the_file_is_cut_into_blocks_leaves_no_trace(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, block_s: float
) -> None:
    """To the last letter: what is printed depends on the signal alone."""
    path = npz(tmp_path / "a.npz", vibration())
    expected = replay(tmp_path, path, "--json")
    monkeypatch.setattr(app_replay, "ReplaySource", functools.partial(ReplaySource, block_s=block_s))
    assert replay(tmp_path, path, "--json") == expected


@pytest.mark.parametrize("encoding", ["ascii", "latin-1", "utf-8"])
def test_an_alphabet_that_lacks_a_letter_stops_nothing(tmp_path: Path, encoding: str) -> None:
    """File names may be no text, and old terminals know few letters; such a letter is shown by its code."""
    path = npz(tmp_path / "p\udce4.npz", vibration(2))
    done = call("replay", config(tmp_path), path, encoding=encoding)
    assert (done.code, done.err) == (0, "")
    assert r"p\udce4.npz: 2 channel(s)" in done.out
