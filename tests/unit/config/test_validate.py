import datetime as dt
from enum import StrEnum
from typing import Annotated, Literal

import pytest
from hypothesis import given
from hypothesis import strategies as st
from pydantic import BaseModel, ConfigDict, Discriminator, Field, RootModel, Tag, field_validator, model_validator
from pydantic_core import PydanticCustomError

from humbell.config.templates import apply_templates
from humbell.config.tree import Tree, Value, read_tree
from humbell.config.validate import validate
from humbell.model import ConfigError, Id, Secret


class Settings(BaseModel):
    """Base of the models here, as strict about keys as the real ones."""

    model_config = ConfigDict(extra="forbid", frozen=True)


class Mount(StrEnum):
    """An enumeration."""

    STUD = "stud"
    MAGNET = "magnet"


class Limit(Settings):
    """A model with a rule over two keys."""

    band_hz: tuple[float, float] = (10.0, 1000.0)
    high: float = Field(gt=0, le=100, description="the limit in mm/s RMS")
    deadband: float = 0.1

    @model_validator(mode="after")
    def _check(self) -> "Limit":
        if self.deadband > self.high:
            raise ValueError(f"deadband: {self.deadband} is above high={self.high} (give a deadband below the limit)")
        return self


class Point(Settings):
    """A model with an alias, a date and choices."""

    channel: str = Field(pattern="^[a-z]+/[0-9]+$")
    sensitivity: float | None = None
    calibrated: dt.date | None = None
    mount: Mount = Mount.STUD
    judged: bool = Field(default=True, alias="judge")
    velocity: Limit | None = None
    unit: Literal["g", "V"] = "g"
    deglitch: Literal["off", "on"] = "off"

    @field_validator("channel")
    @classmethod
    def _check_channel(cls, channel: str) -> str:
        if channel == "daq/9":
            raise ValueError("'daq/9' is no channel (numbers end at 3)")
        return channel


class Alsa(Settings):
    """One kind of source."""

    kind: Literal["alsa"]
    rate_hz: int = Field(default=48000, ge=1)


class Replay(Settings):
    """Another kind of source, with a field that is named like a kind."""

    kind: Literal["replay"]
    alsa: int = 0


Source = Annotated[Alsa | Replay, Field(discriminator="kind")]


class FixedSpeed(Settings):
    """One form of speed."""

    rpm: float


class TopicSpeed(Settings):
    """Another form of speed."""

    topic: str
    qos: int


def _form(value: object) -> str:
    return "rpm" if isinstance(value, dict) and "rpm" in value else "topic" if isinstance(value, dict) else "none"


Speed = Annotated[Annotated[FixedSpeed, Tag("rpm")] | Annotated[TopicSpeed, Tag("topic")], Discriminator(_form)]


class Tags(RootModel[list[Id]]):
    """A model that is a list."""


class Machine(Settings):
    """A model with mappings of models."""

    points: dict[Id, Point] = {}
    speed: Speed | None = None
    level: int | Literal["auto"] = "auto"
    tags: Tags = Tags([])
    names: list[str] = Field(default=[], max_length=2)


class Broker(Settings):
    """A model with a secret."""

    password: Secret


class Site(Settings):
    """The whole of a configuration."""

    site: Id = Field(description="id of the plant")
    sources: dict[Id, Source] = {}
    machines: dict[Id, Machine] = {}
    brokers: dict[Id, Broker] = {}

    @model_validator(mode="after")
    def _check_channels(self) -> "Site":
        lost = [
            f"machines.{name}.points.{key}.channel: {point.channel!r} is of no source (add the source)"
            for name, machine in self.machines.items()
            for key, point in machine.points.items()
            if self.sources and point.channel.partition("/")[0] not in self.sources
        ]
        if lost:
            raise ValueError("\n".join(lost))
        return self


def problems(text: str) -> tuple[str, ...]:
    tree = read_tree(text, "site.yaml")
    with pytest.raises(ConfigError) as caught:
        validate(Site, tree, "site.yaml")
    return caught.value.problems


def point(text: str) -> str:
    """Return the one problem of a point with a channel and *text*, without file and line."""
    (found,) = problems(f"site: a\nmachines: {{p-1: {{points: {{de-h: {{channel: daq/0, {text}}}}}}}}}\n")
    return found.removeprefix("site.yaml:2: machines.p-1.points.de-h.")


def machine(text: str) -> tuple[str, ...]:
    """Return the problems of a machine with *text*, without file and line."""
    found = problems(f"site: a\nmachines: {{p-1: {{{text}}}}}\n")
    return tuple(line.removeprefix("site.yaml:2: machines.p-1.") for line in found)


def test_a_tree_that_fits_gives_the_model() -> None:
    """What the file says is in the model, and defaults where it says nothing."""
    site = validate(Site, read_tree("site: a\nmachines: {p-1: {points: {de-h: {channel: daq/0}}}}\n", "x"), "x")
    assert site.machines["p-1"].points["de-h"].mount is Mount.STUD


def test_five_faults_of_different_kinds_give_five_messages() -> None:
    """Every fault has a line of its own with the file's line, the path, what is wrong, and what to do."""
    text = (
        "site: a\n"
        "sources:\n"
        "  tape: {kind: reply}\n"
        "machines:\n"
        "  p-101:\n"
        "    points:\n"
        "      de-h:\n"
        "        channel: daq/0\n"
        "        sensitvity: 100.2\n"
        "        calibrated: 14.1.2026\n"
        "        velocity:\n"
        "          band_hz: [10, fast]\n"
    )
    de_h = "machines.p-101.points.de-h"
    keys = "channel, sensitivity, calibrated, mount, judge, velocity, unit, deglitch"
    assert problems(text) == (
        "site.yaml:3: sources.tape.kind: 'reply' is not known (did you mean 'replay'? known: alsa, replay)",
        f"site.yaml:9: {de_h}.sensitvity: is not known here (did you mean 'sensitivity'? known: {keys})",
        f"site.yaml:10: {de_h}.calibrated: '14.1.2026' is no date (write it as YYYY-MM-DD, such as 2026-01-14)",
        f"site.yaml:11: {de_h}.velocity.high: is missing (add it: the limit in mm/s RMS)",
        f"site.yaml:12: {de_h}.velocity.band_hz[1]: 'fast' is no number (write it such as 4.5, without a unit)",
    )


@pytest.mark.parametrize(
    ("text", "expected"),
    [
        ("sensitivity: many", "sensitivity: 'many' is no number (write it such as 4.5, without a unit)"),
        ("judge: perhaps", "judge: 'perhaps' is neither true nor false (write true or false)"),
        ("mount: studd", "mount: 'studd' is not known (did you mean 'stud'? known: stud, magnet)"),
        ("unit: mm/s", "unit: 'mm/s' is not known (known: g, V)"),
        ("deglitch: off", "deglitch: false is not known (put it in quotes; known: off, on)"),
        ("mount: on", "mount: true is not known (known: stud, magnet)"),
        ("unit:", "unit: there is no value (give one, or take the key out)"),
        ("velocity: {high: 0}", "velocity.high: 0 is too small (give more than 0)"),
        ("velocity: {high: 1000.5}", "velocity.high: 1000.5 is too large (give at most 100)"),
        ("velocity: {high: 1, band_hz: [5]}", "velocity.band_hz[1]: is missing (add it)"),
        ("velocity: {high: 1, band_hz: [5, 6, 7]}", "velocity.band_hz: there are too many entries (give at most 2)"),
        (
            "velocity: {high: 1, band_hz: 5}",
            "velocity.band_hz: 5 stands where a list has to (write it as [FIRST, SECOND])",
        ),
        (
            "velocity: 4.5",
            "velocity: 4.5 stands where a mapping has to (write KEY: VALUE lines below it, indented)",
        ),
    ],
)
def test_faulty_values_are_told_with_what_was_found_and_what_to_do(text: str, expected: str) -> None:
    """The usual mistakes have words of their own, with the value as it stands in the file and the limit it breaks."""
    assert point(text) == expected


@pytest.mark.parametrize(
    ("channel", "expected"),
    [
        ("101", "101 is read as a number (write it in quotes)"),
        ("off", "false is read as true or false (write it in quotes)"),
        ("2026-01-14", "2026-01-14 is read as a date (write it in quotes)"),
        ("[a]", "a list stands where text has to (write it behind the ':')"),
        ("DAQ/0", "'DAQ/0' does not have the right form (it has to match ^[a-z]+/[0-9]+$)"),
        ("daq/9", "'daq/9' is no channel (numbers end at 3)"),
    ],
)
def test_text_that_yaml_reads_otherwise_wants_quotes(channel: str, expected: str) -> None:
    """Where text has to stand, the message says as what it was read."""
    (found,) = problems(f"site: a\nmachines:\n  p-1:\n    points: {{de-h: {{channel: {channel}}}}}\n")
    assert found == f"site.yaml:4: machines.p-1.points.de-h.channel: {expected}"


@pytest.mark.parametrize(
    ("wrong", "like"), [("P 101", "p-101"), ("Süd/1", "s-d-1"), ("x" * 70, "x" * 64), ("_", "p-101")]
)
def test_an_id_of_another_form_is_told_with_one_that_would_do(wrong: str, like: str) -> None:
    """Ids as keys and as values are told in the same words; long values are shortened."""
    value = f"'{wrong}'" if len(wrong) < 60 else f"'{'x' * 58}…"
    expected = f"{value} is no id (use a-z, 0-9, '.', '_' and '-', such as {like})"
    assert problems(f'site: "{wrong}"\n') == (f"site.yaml:1: site: {expected}",)
    assert problems(f'site: a\nmachines:\n  "{wrong}": {{}}\n') == (f"site.yaml:3: machines.{wrong}: {expected}",)


def test_the_key_that_tells_the_kind_may_be_missing_or_unknown() -> None:
    """A mapping of several kinds is told about its kind first."""
    assert problems("site: a\nsources:\n  x: {rate_hz: 1}\n  y: {kind: 5}\n  z: 7\n") == (
        "site.yaml:3: sources.x.kind: is missing (add it: one of alsa, replay)",
        "site.yaml:4: sources.y.kind: 5 is not known (known: alsa, replay)",
        "site.yaml:5: sources.z: 7 stands where a mapping has to (write KEY: VALUE lines below it, indented)",
    )


def test_paths_hold_the_keys_of_the_file_alone() -> None:
    """What pydantic puts between them (tags of kinds, names of types) is dropped, though a key may be named alike."""
    text = "site: a\nsources:\n  x: {kind: alsa, rate_hz: 0}\n  y: {kind: replay, alsa: q, rate_hz: 5}\n"
    assert problems(text) == (
        "site.yaml:3: sources.x.rate_hz: 0 is too small (give at least 1)",
        "site.yaml:4: sources.y.alsa: 'q' is no whole number (write it such as 4, without a unit)",
        "site.yaml:4: sources.y.rate_hz: is not known here (known: kind, alsa)",
    )
    assert machine("speed: {rpm: fast}") == ("speed.rpm: 'fast' is no number (write it such as 4.5, without a unit)",)
    assert machine("speed: {topic: t}") == ("speed.qos: is missing (add it)",)
    assert machine("speed: {topic: t, qos: 1, topc: t}") == (
        "speed.topc: is not known here (did you mean 'topic'? known: topic, qos)",
    )
    assert machine("speed: 5") == ("speed: 'none' is not known (known: rpm, topic)",)


def test_what_each_kind_says_of_one_value_stands_in_one_line() -> None:
    """A value of several kinds that fits none is one fault."""
    assert machine("level: high") == (
        "level: 'high' is no whole number (write it such as 4, without a unit), or: 'high' is not known (known: auto)",
    )


def test_lists_are_told_by_index_and_length() -> None:
    """Items have their number, from 0, in brackets."""
    assert machine("tags: [a, B b]") == ("tags[1]: 'B b' is no id (use a-z, 0-9, '.', '_' and '-', such as b-b)",)
    assert machine("names: [a, b, c]") == ("names: there are too many entries (give at most 2)",)


def test_the_words_of_our_validators_are_given_as_they_are() -> None:
    """A text that begins with the path of a key is told for that key; each line of it is a problem of its own."""
    assert point("velocity: {high: 4.5, deadband: 5}") == (
        "velocity.deadband: 5.0 is above high=4.5 (give a deadband below the limit)"
    )
    text = (
        "site: a\nsources: {tape: {kind: replay}}\nmachines:\n"
        "  p-1:\n    points:\n      de-h: {channel: daq/0}\n      nde-h:\n        channel: daq/1\n"
    )
    assert problems(text) == (
        "site.yaml:6: machines.p-1.points.de-h.channel: 'daq/0' is of no source (add the source)",
        "site.yaml:8: machines.p-1.points.nde-h.channel: 'daq/1' is of no source (add the source)",
    )


def test_text_of_validators_that_names_no_key_stands_at_their_value() -> None:
    """Words before a colon that are no key stay in the text; custom errors of pydantic are texts of ours, too."""

    class Rules(Settings):
        a: int
        b: int

        @field_validator("a", "b")
        @classmethod
        def _check(cls, value: int) -> int:
            if value == 1:
                raise PydanticCustomError("our_own", "a: no {what}", {"what": "luck"})
            raise AssertionError(f"{value} is not enough: give more")

    with pytest.raises(ConfigError) as caught:
        validate(Rules, read_tree("a: 1\nb: 2\n", "x"), "x")
    assert caught.value.problems == ("x:1: a: a: no luck", "x:2: b: 2 is not enough: give more")


def test_a_rule_over_the_whole_file_stands_at_its_beginning() -> None:
    """Without a path, file and line stand before the text alone."""

    class Rule(BaseModel):
        @model_validator(mode="after")
        def _check(self) -> "Rule":
            raise ValueError("nothing to watch (add a machine)")

    with pytest.raises(ConfigError) as caught:
        validate(Rule, read_tree("# none\n{}\n", "x"), "x")
    assert caught.value.problems == ("x:1: nothing to watch (add a machine)",)


def test_faults_in_a_template_are_told_where_they_were_written() -> None:
    """The path is that of the machine, the line that of the template."""
    text = "site: a\ntemplates:\n  t:\n    names: 5\nmachines:\n  p-1: {template: t}\n"
    with pytest.raises(ConfigError) as caught:
        validate(Site, apply_templates(read_tree(text, "x")), "x")
    assert caught.value.problems == (
        "x:4: machines.p-1.names: 5 stands where a list has to (write it as [FIRST, SECOND])",
    )


@pytest.mark.parametrize("literal", ["hunter2", "123456", "{hunter2: x}"])
def test_a_literal_secret_is_refused_without_a_trace_of_it(literal: str) -> None:
    """Neither the message nor an error behind it, which a log might print, holds what may be a password."""
    advice = "write ${env:NAME}, ${file:/PATH} or ${credential:NAME}"
    text = f"site: a\nbrokers:\n  local:\n    password: {literal}\n"
    with pytest.raises(ConfigError) as caught:
        validate(Site, read_tree(text, "x"), "x")
    assert caught.value.problems == (f"x:4: brokers.local.password: secrets stand outside this file ({advice})",)
    assert caught.value.__cause__ is None
    assert caught.value.__context__ is None


def test_types_without_words_of_their_own_fall_back_to_those_of_pydantic() -> None:
    """No error goes untold because we have no words for it."""

    class Odd(BaseModel):
        number: complex

    with pytest.raises(ConfigError) as caught:
        validate(Odd, read_tree("number: x\n", "x"), "x")
    (text,) = caught.value.problems
    assert text.startswith("x:1: number: 'x' cannot be used: ")


KEYS = ["site", "sources", "machines", "p-1", "points", "de-h", "speed", "rpm", "topic", "kind", "velocity", "high"]
KEYS += ["band_hz", "level", "tags", "alsa", "brokers", "password", "channel", "P 1", "a\nb", "[key]"]
SCALARS = st.none() | st.booleans() | st.integers() | st.floats() | st.text() | st.dates() | st.sampled_from(KEYS)
VALUES: st.SearchStrategy[Value] = st.recursive(
    SCALARS, lambda inner: st.lists(inner, max_size=3) | st.dictionaries(st.sampled_from(KEYS), inner, max_size=6)
)


@given(st.dictionaries(st.sampled_from(KEYS[:3]), VALUES))
def test_any_data_gives_a_model_or_a_configuration_error(data: dict[str, Value]) -> None:
    """Each problem is one line with file, line and what to do, whatever stands in the file."""
    try:
        validate(Site, Tree(data, {}), "x")
    except ConfigError as error:
        found = error.problems
    else:
        return
    assert found
    for line in found:
        assert line.startswith("x:1: ")
        assert line.endswith(")")
        assert len(line.splitlines()) == 1
