"""`humbell-sim`: what it writes, and what it refuses before it sends anything."""

from pathlib import Path

import numpy as np
import pytest
from typer.testing import CliRunner

from humbell_sim.cli import app
from humbell_sim.tarnholm import renderer


def run(*arguments: str) -> tuple[int, str]:
    """Return the exit code of a command and all that it printed, on one line."""
    result = CliRunner().invoke(app, arguments, env={"COLUMNS": "400", "EMPTY": ""})
    return result.exit_code, " ".join(result.output.split())


def test_a_recording_holds_the_story(tmp_path: Path) -> None:
    """Three channels in g at 51.2 kHz, the same as everywhere else for the same seed."""
    file = tmp_path / "a.npz"
    assert run("record", str(file), "--seconds", "2", "--seed", "5") == (0, f"{file}: 2 s, 3 channels at 51200 Hz")
    with np.load(file) as recording:
        assert (float(recording["fs"]), str(recording["unit"])) == (51_200.0, "g")
        np.testing.assert_array_equal(recording["x"], renderer(5).render(0, 102_400))


def test_a_recording_has_the_name_of_one(tmp_path: Path) -> None:
    """Only .npz can be written; nothing is left behind."""
    code, said = run("record", str(tmp_path / "a.wav"))
    assert code == 2
    assert "does not end in .npz (give such a name)" in said
    assert not list(tmp_path.iterdir())


@pytest.mark.parametrize(
    ("arguments", "said"),
    [
        ([], "--source"),
        (["--source", "Wifi 1"], "Wifi 1: is no id"),
        (["--source", "a", "--source", "a"], "the same id twice"),
        (["--source", "a", "--channels", "65"], "channels: Input should be less than or equal to 64"),
        (["--source", "a", "--channels", "64", "--block", "10"], "give a block_s of at most 0.639"),
        (["--source", "a", "--start", "soon"], "--start soon: is no time"),
        (["--source", "a", "--start", "2026-03-01T10:00:00"], "has no zone"),
        (["--source", "a", "--start", "1969-12-31T00:00:00Z"], "lies before 1970"),
        (["--source", "a", "--password-env", "EMPTY"], "needs a user name"),
        (["--source", "a", "--user", "u", "--password-env", "EMPTY"], "the environment has no variable EMPTY"),
        (["--source", "a", "--certificate", "a.pem"], "go with TLS (add --ca)"),
        (["--source", "a", "--ca", "a.pem", "--key", "a.key"], "add --certificate"),
        (["--source", "a", "--ca", "no-such-file.pem"], "--ca, --certificate, --key: cannot be used"),
    ],
)
def test_a_feed_that_cannot_be_is_refused_before_it_begins(arguments: list[str], said: str) -> None:
    """Wrong use is code 2, with what is wrong and what to do."""
    code, output = run("feed", *arguments)
    assert code == 2
    assert said in output
