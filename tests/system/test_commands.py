"""The commands, as processes of their own: what they print, where, and with which exit code they end."""

import json
import os
import pty
import re
import subprocess
from collections.abc import Iterator
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from system.console import COMMAND, CONFIG, PATIENCE_S, SECONDS, Done, call, config, npz, start, vibration, wav

FAULTY = CONFIG.replace("mount: stud", "mount: glue").replace("tape/0", "disk/0")

READING = ["kind", "time", "machine", "point", "measure", "value", "unit", "span_s", "quality", "cause", "detail"]
TRANSITION = ["kind", "time", "machine", "point", "alarm", "from", "to", "verified", "value", "limit", "occurrence"]
COVERAGE = ["kind", "machine", "point", "seconds"]
TIME = re.compile(r"\d{4}-\d\d-\d\dT\d\d:\d\d:\d\d(\.\d{1,6})?Z")


# Starting takes long, so what a process did is kept for all tests of this file.
@pytest.fixture(scope="module")
def folder(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A folder with a configuration and the same recording twice."""
    made = tmp_path_factory.mktemp("site")
    config(made)
    npz(made / "a.npz", vibration())
    wav(made / "a.wav", vibration())
    return made


@pytest.fixture(scope="module")
def checked(folder: Path) -> Done:
    """`humbell check`."""
    return start("check", folder / "node.yaml")


@pytest.fixture(scope="module")
def schema() -> Done:
    """`humbell schema`."""
    return start("schema")


@pytest.fixture(scope="module")
def replayed(folder: Path) -> Done:
    """`humbell replay --json` of the NPZ file."""
    return start("replay", folder / "node.yaml", folder / "a.npz", "--json")


@pytest.fixture(scope="module")
def refused(folder: Path) -> Done:
    """`humbell replay` of a file that is not there."""
    return start("replay", folder / "node.yaml", folder / "missing.npz", "--json")


@pytest.fixture(scope="module")
def watched(folder: Path) -> tuple[int, str, str]:
    """Exit code, output and error output of `humbell replay` whose error output is a terminal."""
    ours, theirs = pty.openpty()
    process = subprocess.Popen(
        [*COMMAND, "replay", str(folder / "node.yaml"), str(folder / "a.npz")],
        stdout=subprocess.PIPE,
        stderr=theirs,
        env=os.environ | {"TERM": "xterm", "COLUMNS": "80"},
    )
    os.close(theirs)
    shown = b"".join(read_terminal(ours))
    out, _ = process.communicate(timeout=PATIENCE_S)
    os.close(ours)
    return process.returncode, out.decode(), shown.decode()


def read_terminal(terminal: int) -> Iterator[bytes]:
    """Read to the end, which Linux tells as an error."""
    try:
        while part := os.read(terminal, 4096):
            yield part
    except OSError:
        return


@pytest.fixture(scope="module")
def cut_short(tmp_path_factory: pytest.TempPathFactory) -> tuple[int, bytes, bytes]:
    """Exit code, first line and errors of a replay whose reader goes away after one line, as `head -1` does."""
    made = tmp_path_factory.mktemp("long")
    quick = CONFIG.replace("velocity: {", "velocity: {band_hz: [100, 1000], frame_s: 0.1, ")
    # 600 readings of 200 letters: twice what a pipe holds.
    recording = npz(made / "long.npz", vibration(60.0))
    process = subprocess.Popen(
        [*COMMAND, "replay", str(config(made, quick)), str(recording), "--json"],
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
    )
    assert process.stdout is not None
    line = process.stdout.readline()
    process.stdout.close()
    _, err = process.communicate(timeout=PATIENCE_S)
    return process.returncode, line, err


def parsed(done: Done) -> list[dict[str, Any]]:
    """Return the JSON objects that were printed, one a line."""
    return [json.loads(line) for line in done.lines]


def test_check_tells_the_whole_plan(checked: Done) -> None:
    """Bands, the rate that they need, sensitivity, limits, what is not watched, and the cautions; exit code 0."""
    assert (checked.code, checked.err) == (0, "")
    for words in (
        "tarnholm-water, node pumphouse-1",
        "source tape: replay, rate from the file, m/s2",
        "p-101: Raw water pump 1, 1480 r/min (24.67 Hz)",
        "de-h: channel tape/0, mount stud",
        "sensitivity   none: blocks must carry g or m/s2",
        "10 to 1000 Hz, a value every 1 s, needs 2560 Hz or more",
        "high 4.5, high_high 7.1 mm/s RMS, deadband 0.3, raised after 3 s, returns after 3 s",
        "1 points; 1 of 1 overalls are judged by limits.",
        "Not watched:\n- p-101/de-h acceleration: switched off, not measured\n",
        "- p-101: its running state is unknown",
        "Cautions:\n- Humbell monitors. It is no machine protection system",
        "Limits taken from tables are general guidance.",
        "isolate and lock out",
    ):
        assert words in checked.out


def test_check_tells_the_same_as_json(folder: Path) -> None:
    """One object, for programs, with the file's own digest."""
    done = call("check", folder / "node.yaml", "--json")
    told = json.loads(done.out, parse_constant=pytest.fail)
    assert (done.code, done.err) == (0, "")
    assert list(told) == ["site", "node", "configuration", "points", "not_watched", "proposals", "cautions"]
    (point,) = told["points"]
    assert (point["machine"], point["point"], point["channel"]) == ("p-101", "de-h", "tape/0")
    assert point["bands"][0]["limits"] == {"high": 4.5, "high_high": 7.1}
    assert len(told["configuration"]["sha256"]) == 64
    assert len(told["cautions"]) == 3


def test_a_faulty_configuration_ends_each_command_with_code_2(folder: Path, tmp_path: Path) -> None:
    """All faults on the error output, a line each, and nothing on the other."""
    path = config(tmp_path, FAULTY)
    for command, more in (("check", []), ("check", ["--json"]), ("replay", [str(folder / "a.npz"), "--json"])):
        done = call(command, path, *more)
        assert (done.code, done.out) == (2, "")
        assert done.err.splitlines() == [
            f"{path}:11: machines.p-101.points.de-h.channel: there is no source 'disk' (known: tape)",
            f"{path}:12: machines.p-101.points.de-h.mount: 'glue' is not known (known: stud, adhesive, magnet, hand)",
        ]


def test_wrong_use_ends_with_code_2_and_says_how() -> None:
    """A command or argument that is not there is told with where to read on."""
    for command in (["chekc"], ["check"], ["check", "a.yaml", "--jsno"], ["replay", "a.yaml"]):
        done = call(*command)
        assert (done.code, done.out) == (2, "")
        assert "Usage: " in done.err
        assert "Traceback" not in done.err


def test_help_and_version_are_there() -> None:
    """The exit codes stand in the help."""
    done = call("--help")
    assert done.code == 0
    assert "0 done, 1 the answer is no, 2 wrong use or configuration" in " ".join(done.out.split())
    assert re.fullmatch(r"humbell \d+\.\d+\.\d+\n", call("--version").out)


def test_the_schema_is_one_that_editors_know(schema: Done) -> None:
    """JSON Schema, draft 2020-12; every model is closed, and each reference in it leads somewhere."""
    assert (schema.code, schema.err) == (0, "")
    told = json.loads(schema.out)
    assert told["$schema"] == "https://json-schema.org/draft/2020-12/schema"
    assert told["required"] == ["site", "sources", "machines"]
    models = [told, *told["$defs"].values()]
    assert all(model["additionalProperties"] is False for model in models if model["type"] == "object")
    for name in re.findall(r'"\$ref": "#/\$defs/(\w+)"', schema.out):
        assert name in told["$defs"]
    point = told["$defs"]["Point"]["properties"]
    assert {"channel", "sensitivity", "mount", "bearing", "velocity", "acceleration"} == set(point)
    assert all(field["description"] for model in models for field in model.get("properties", {}).values())


def test_replay_prints_the_lines_of_the_design(replayed: Done) -> None:
    """Keys and their order are those of section 6, with `detail` and `verified` besides; nothing else is said."""
    assert (replayed.code, replayed.err) == (0, "")
    told = parsed(replayed)
    keys = {"reading": READING, "transition": TRANSITION, "coverage": COVERAGE}
    assert {one["kind"] for one in told} == set(keys)
    for one in told:
        assert list(one) == keys[one["kind"]]
        assert "time" not in one or TIME.fullmatch(one["time"])


def test_replay_prints_in_order_of_time(replayed: Done) -> None:
    """The end of each frame, from 1970 where the file has no time; coverage comes last, when all is known."""
    told = parsed(replayed)
    times = [datetime.fromisoformat(one["time"]) for one in told if "time" in one]
    assert times == sorted(times)
    assert times[0] == datetime(1970, 1, 1, 0, 0, 1, tzinfo=UTC)
    assert [one["kind"] for one in told].index("coverage") == len(told) - 1


def test_replay_measures_and_judges(replayed: Done) -> None:
    """2 mm/s, then 6 mm/s, and the alarm three seconds later; the last half second never became a frame."""
    told = parsed(replayed)
    values = [one["value"] for one in told if one["kind"] == "reading"]
    assert values[1:4] == pytest.approx([2.0] * 3, rel=0.01)
    assert values[4:12] == pytest.approx([6.0] * 8, rel=0.01)
    assert values[12] is None
    changes = [one for one in told if one["kind"] == "transition" and one["from"] != one["to"]]
    assert [(one["time"][-4:], one["alarm"], one["to"], one["limit"]) for one in changes] == [
        (":07Z", "velocity_rms.high", "unacknowledged", 4.5)
    ]


def test_coverage_adds_up_to_the_length_of_the_file(replayed: Done) -> None:
    """Each second of the recording is in it once."""
    seconds = parsed(replayed)[-1]["seconds"]
    assert seconds == {"no_samples": 0.5, "settling": 1.0, "measured": 11.0}
    assert sum(seconds.values()) == SECONDS


def test_a_wav_file_of_the_same_samples_is_the_same(folder: Path, replayed: Done) -> None:
    """The type of the file leaves no trace, occurrence ids included; nor does running in this process."""
    assert call("replay", folder / "node.yaml", folder / "a.wav", "--json").lines == replayed.lines


def test_a_terminal_shows_progress_on_the_error_output(watched: tuple[int, str, str]) -> None:
    """How much of the signal has been played; the summary on the other output stays clean."""
    code, out, shown = watched
    assert code == 0
    assert re.search(r"\d+ of 12 s of signal", shown)
    assert "\x1b" not in out
    assert "s of signal" not in out


def test_the_summary_can_be_read(watched: tuple[int, str, str]) -> None:
    """File, point, seconds by category, spread of each measure with its unit and RMS, and the alarms."""
    lines = watched[1].splitlines()
    assert lines[0].endswith("a.npz: 2 channel(s), 2560 Hz, m/s2, 12.5 s from 1970-01-01T00:00:00Z")
    assert lines[2:4] == ["p-101/de-h", "  no_samples 0.5 s, settling 1 s, measured 11 s"]
    numbers = r"[12]\.\d+ … +5\.9\d+ … +(5\.9|6\.0)\d+"
    assert re.fullmatch(rf"  velocity_rms +{numbers} mm/s RMS +\(least, median, greatest of 12\)", lines[4])
    assert "  1 times velocity_rms bad: incomplete" in lines
    assert "Alarms: 1 standing at the end" in lines
    end = r"p-101/de-h velocity_rms.high: normal -> unacknowledged at (5\.9|6\.0)\d+ mm/s \(limit 4\.5\)"
    assert re.fullmatch(rf"  1970-01-01T00:00:07Z  {end}", lines[-1])


def test_a_reader_that_has_read_enough_is_no_failure(cut_short: tuple[int, bytes, bytes]) -> None:
    """`| head -1` gets its line, and nobody complains."""
    code, line, err = cut_short
    assert json.loads(line)["kind"] == "reading"
    assert (code, err) == (0, b"")


@pytest.mark.parametrize("command", ["check", "replay"])
def test_a_full_disk_is_told_in_one_line(folder: Path, command: str) -> None:
    """Output that cannot be written is a part out of reach: code 3, and no traceback."""
    files = [folder / "a.npz"] if command == "replay" else []
    with open("/dev/full", "w", encoding="utf-8") as full:  # noqa: PTH123 - a device
        done = call(command, folder / "node.yaml", *files, output=full)
    assert (done.code, done.err) == (3, "standard output: the disk is full (make room, or write elsewhere)\n")


def test_a_refusal_is_one_line(refused: Done, folder: Path) -> None:
    """Exit code 3: a part was out of reach. No traceback, and nothing on the output that a program reads."""
    assert (refused.code, refused.out) == (3, "")
    assert refused.err == f"{folder}/missing.npz: no such file (check the path)\n"


def test_rounding_of_values_hides_the_processor(replayed: Done) -> None:
    """Six digits and no more, so that the same recording gives the same lines on every computer."""
    for one in parsed(replayed):
        if one.get("value") is not None:
            assert one["value"] == float(np.format_float_scientific(one["value"], precision=5))
