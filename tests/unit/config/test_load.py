"""From a file to what it means: every fault told at once, each with file, line, path, what it is and what to do."""

import hashlib
import re
from pathlib import Path

import pytest

from humbell.config import Loaded, load
from humbell.model import ConfigError

GOOD = """\
site: tarnholm-water
sources:
  tape: {kind: replay, rate_hz: 51200}
machines:
  p-101:
    points:
      de-h:
        channel: tape/0
        velocity: {high: 4.5}
"""

FIVE = """\
site: Tarnholm Water
sources:
  tape: {kind: replay, rate_hz: 2560}
machines:
  p-101:
    points:
      de-h:
        channel: tape/0
        mount: glue
        velocity: {high: 4.5, deadband: 5.0}
        acceleration: off
      de-v:
        channel: disk/0
        acceleration: off
      nde-h:
        channel: tape/1
"""

FIVE_SAID = [
    (1, "site", "'Tarnholm Water' is no id (use a-z, 0-9, '.', '_' and '-', such as tarnholm-water)"),
    (9, "machines.p-101.points.de-h.mount", "'glue' is not known (known: stud, adhesive, magnet, hand)"),
    (
        10,
        "machines.p-101.points.de-h.velocity.deadband",
        "5 is not below high=4.5 (give a deadband below the limit)",
    ),
    (13, "machines.p-101.points.de-v.channel", "there is no source 'disk' (known: tape)"),
    (
        15,
        "machines.p-101.points.nde-h.acceleration.band_hz",
        (
            "2560 Hz carries a band up to 1000 Hz, not to 16000 Hz (give band_hz: [500, 1000], or leave the band out "
            "by acceleration: off, or sample at 40960 Hz or more)"
        ),
    ),
]


def loaded(folder: Path, text: str) -> Loaded:
    """Write *text* and load it."""
    path = folder / "node.yaml"
    path.write_text(text, encoding="utf-8")
    return load(path)


def problems(folder: Path, text: str) -> list[str]:
    """Return what is said against *text*, without the path of the folder."""
    with pytest.raises(ConfigError) as caught:
        loaded(folder, text)
    assert str(caught.value) == "\n".join(caught.value.problems)
    return [line.removeprefix(f"{folder}/") for line in caught.value.problems]


def test_a_good_file_says_where_it_came_from(tmp_path: Path) -> None:
    """Path and SHA-256 of the bytes as they are on the disk go with what was read."""
    found = loaded(tmp_path, GOOD)
    assert found.path == tmp_path / "node.yaml"
    assert found.digest == hashlib.sha256(GOOD.encode()).hexdigest()
    assert list(found.site.machines) == ["p-101"]


def test_five_faults_give_five_messages_at_once(tmp_path: Path) -> None:
    """Each has line, path, what is wrong and what to do: nobody has to mend and try again four times."""
    expected = [f"node.yaml:{line}: {path}: {text}" for line, path, text in FIVE_SAID]
    assert problems(tmp_path, FIVE) == expected


def test_a_key_that_stands_twice_hides_no_other_fault(tmp_path: Path) -> None:
    """Reading goes on behind it, and all faults come in one answer, by line."""
    text = FIVE.replace("sources:\n", "sources:\n  tape: {kind: replay, rate_hz: 2560}\n")
    text = text.replace("        mount: glue\n", "        mount: stud\n        mount: glue\n")
    rest = [(line + 2, path, said) for line, path, said in FIVE_SAID[2:]]
    expected = [
        FIVE_SAID[0],
        (4, "sources.tape", "the key stands in line 3 already (keep one of the two)"),
        (11, "machines.p-101.points.de-h.mount", "the key stands in line 10 already (keep one of the two)"),
        *rest,
    ]
    assert problems(tmp_path, text) == [f"node.yaml:{line}: {path}: {said}" for line, path, said in expected]


def test_every_message_says_what_to_do(tmp_path: Path) -> None:
    """Each line ends in an advice in brackets."""
    for line in problems(tmp_path, FIVE):
        assert re.fullmatch(r"node\.yaml:\d+: [^ ]+: .+ \(.+\)", line)


def test_machines_share_what_a_template_says(tmp_path: Path) -> None:
    """A machine takes over all of its template, and its own settings go before it."""
    site = loaded(
        tmp_path,
        """\
site: tarnholm-water
sources: {tape: {kind: replay}}
templates:
  pump:
    group: pumps
    speed: {rpm: 1480}
    points:
      de-h: {mount: stud, velocity: {high: 4.5, high_high: 7.1}}
machines:
  p-101: {template: pump, points: {de-h: {channel: tape/0}}}
  p-102: {template: pump, group: old-pumps, points: {de-h: {channel: tape/1, velocity: {high: 3.0}}}}
""",
    ).site
    first, second = (site.machines[name] for name in ("p-101", "p-102"))
    assert (first.group, second.group, first.speed) == ("pumps", "old-pumps", second.speed)
    for machine, high in ((first, 4.5), (second, 3.0)):
        velocity = machine.points["de-h"].velocity
        assert velocity is not None
        assert (velocity.high, velocity.high_high, machine.points["de-h"].mount) == (high, 7.1, "stud")


def test_a_fault_in_a_template_is_told_where_it_was_written(tmp_path: Path) -> None:
    """The line is that of the template, the path that of each machine that takes it over."""
    said = problems(
        tmp_path,
        """\
site: tarnholm-water
sources: {tape: {kind: replay}}
templates:
  pump:
    points:
      de-h: {mount: glue}
machines:
  p-101: {template: pump, points: {de-h: {channel: tape/0}}}
""",
    )
    assert said == [
        "node.yaml:6: machines.p-101.points.de-h.mount: 'glue' is not known (known: stud, adhesive, magnet, hand)"
    ]


def test_a_template_that_is_not_there_is_named_with_those_that_are(tmp_path: Path) -> None:
    """A slip of the pen is told with the closest name."""
    text = GOOD.replace("  p-101:\n", "  p-101:\n    template: pmup\n") + "templates: {pump: {}}\n"
    assert problems(tmp_path, text) == [
        "node.yaml:6: machines.p-101.template: 'pmup' is no template (did you mean 'pump'? known: pump)"
    ]


@pytest.mark.parametrize("channel", ["tape/0", "tape/00"])
def test_a_channel_belongs_to_one_point(tmp_path: Path, channel: str) -> None:
    """Two points with one signal are a copied line; the message names the point that had it first, both times."""
    more = "".join(f"      {name}:\n        channel: {channel}\n" for name in ("de-v", "nde-h"))
    said = "tape/0 is the channel of p-101/de-h already (give each point its own)"
    assert problems(tmp_path, GOOD + more) == [
        f"node.yaml:11: machines.p-101.points.de-v.channel: {said}",
        f"node.yaml:13: machines.p-101.points.nde-h.channel: {said}",
    ]


@pytest.mark.parametrize(
    ("brokers", "known"),
    [("brokers: {local: {host: 127.0.0.1}}", "did you mean 'local'? known: local"), ("", "known: none")],
)
def test_a_source_names_a_broker_that_is_there(tmp_path: Path, brokers: str, known: str) -> None:
    """A slip of the pen is told before the start, and not by a source that never speaks."""
    text = GOOD.replace("machines:", f"  wifi-1: {{kind: mqtt, broker: lokal}}\n{brokers}\nmachines:")
    assert problems(tmp_path, text) == [
        f"node.yaml:4: sources.wifi-1.broker: there is no broker 'lokal' ({known})",
    ]
    loaded(tmp_path, text.replace("lokal", "local") if brokers else GOOD)


@pytest.mark.parametrize(
    ("rate_hz", "band_hz", "said"),
    [
        (2560, "[10, 1001]", "2560 Hz carries a band up to 1000 Hz, not to 1001 Hz (give band_hz: [10, 1000], or "),
        (2000, "[10, 1000]", "2000 Hz carries a band up to 781.2 Hz, not to 1000 Hz (give band_hz: [10, 781.2], or "),
        (40, "[10, 1000]", "40 Hz carries a band up to 15.6 Hz, not to 1000 Hz (leave the band out by velocity: off, "),
    ],
)
def test_a_rate_that_cannot_carry_a_band_names_the_highest_edge(
    tmp_path: Path, rate_hz: int, band_hz: str, said: str
) -> None:
    """Rate / 2.56 (common practice of analysers), rounded down, at the line of the band; never narrowed silently."""
    text = GOOD.replace("51200", str(rate_hz)).replace(
        "        velocity: {high: 4.5}\n",
        f"        velocity:\n          high: 4.5\n          band_hz: {band_hz}\n        acceleration: off\n",
    )
    (line,) = problems(tmp_path, text)
    assert line.startswith(f"node.yaml:11: machines.p-101.points.de-h.velocity.band_hz: {said}")


def test_a_band_by_default_is_told_at_its_point(tmp_path: Path) -> None:
    """What is not written has no line of its own: that of the closest thing around it is told."""
    (line,) = problems(tmp_path, GOOD.replace("51200", "25600"))
    assert line.startswith(
        "node.yaml:7: machines.p-101.points.de-h.acceleration.band_hz: 25600 Hz carries a band up to 10000 Hz, "
    )


def test_where_the_rate_is_not_known_no_band_is_refused(tmp_path: Path) -> None:
    """Without `rate_hz` only the files will tell."""
    assert loaded(tmp_path, GOOD.replace(", rate_hz: 51200", "")).site.sources["tape"].rate_hz is None


def test_text_that_is_no_utf8_is_told_with_its_line(tmp_path: Path) -> None:
    """An editor of old wrote Latin-1."""
    path = tmp_path / "node.yaml"
    path.write_bytes(GOOD.encode() + "    name: Pümpe\n".encode("latin-1"))
    with pytest.raises(ConfigError) as caught:
        load(path)
    assert caught.value.problems == (f"{path}:10: is no UTF-8 text (save it as UTF-8)",)


def test_a_file_that_cannot_be_read_is_told_in_one_line(tmp_path: Path) -> None:
    """Missing files and folders are told with what to do, and without a traceback's words."""
    missing = tmp_path / "nowhere.yaml"
    for path, said in (
        (missing, "there is no such file (check the name)"),
        (tmp_path, "cannot be read: Is a directory (check the name and the rights)"),
    ):
        with pytest.raises(ConfigError) as caught:
            load(path)
        assert caught.value.problems == (f"{path}: {said}",)
