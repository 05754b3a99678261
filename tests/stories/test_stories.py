"""
Alarm lives as data: each file beside this one tells a life of the alarms of one measure, and what they must tell.

The form, for whoever writes one (no programming needed):

    story: Slow growth                   # what it is about
    why: >                               # why it matters to the site
      A bearing that wears out ...
    limits: {high: 4.5, high_high: 7.1}  # as under `velocity:` in a configuration; what is left out has its default
    frame_s: 1                           # seconds of signal in one value; 1 where it is left out
    pieces: false                        # true: the values come from separate records, of a sensor that sleeps between
    life:                                # one step after the other
      - {for_s: 60, value: 2.8}          # this value, for so long
      - for_s: 30
        value: [2.8, 5.2]                # these values in turn, until the time is over
      - {for_s: 60, from: 2.8, to: 5.2}  # rising, or falling, evenly: the last value is `to`
      - {for_s: 2, value: 9.9, cause: settling}  # a value that is not good, and why (clipped, settling, flat ...)
      - {for_s: 3, cause: no_samples}    # no value at all
      - {for_s: 1800, every_s: 600, value: 2.8}  # separate records, one every so often
      - {do: acknowledge high}           # what a person does; `reset high` for alarms that latch
      - for_s: 11
        value: 5.2
        tells:                           # all that the alarms tell in this step; where it is left out, nothing
          - "00:01:10 high: normal -> unacknowledged"
          - "00:01:15 high_high: normal, not known"

Times count from the beginning of the story; a value is told at its end. Where the state stays, a line tells that it is
`known` now (good values stand behind it), or `not known` any more.
"""

import math
from collections.abc import Iterator
from pathlib import Path
from typing import Annotated, Self

import pytest
import yaml
from pydantic import BaseModel, ConfigDict, Field, ValidationError, model_validator

from humbell.alarms import AlarmState, Book, Event, LimitSettings, plan_alarms
from humbell.model import MAY_RAISE, AlarmId, AlarmType, Cause, Measure, PointId, Quality, Reading, Transition
from unit.alarms.life import SECOND_NS, again, name

FOLDER = Path(__file__).parent
FILES = sorted(FOLDER.glob("*.yaml"))
POINT, MEASURE = PointId("p-101", "de-h"), Measure.VELOCITY_RMS


class Step(BaseModel):
    """One step of a life."""

    model_config = ConfigDict(extra="forbid")

    for_s: Annotated[float | None, Field(gt=0)] = None
    every_s: Annotated[float | None, Field(gt=0)] = None
    value: float | list[float] | None = None
    start: Annotated[float | None, Field(alias="from")] = None
    end: Annotated[float | None, Field(alias="to")] = None
    cause: Cause | None = None
    do: Annotated[str | None, Field(pattern=r"^(acknowledge|reset) (high|high_high)$")] = None
    tells: list[str] = []

    @model_validator(mode="after")
    def _one_kind(self) -> Self:
        if (self.do is None) is (self.for_s is None):
            raise ValueError("a step has either `do` or `for_s`")
        if (self.start is None) is not (self.end is None):
            raise ValueError("`from` and `to` belong together")
        given = (self.value is not None) + (self.start is not None)
        if given > 1 or (self.do is None and not given and self.cause is None):
            raise ValueError("a step with `for_s` has `value`, or `from` and `to`, or a `cause` why there is none")
        return self

    def values(self, count: int) -> Iterator[float]:
        """Return *count* values, NaN where there are none."""
        for number in range(count):
            if self.start is not None and self.end is not None:
                yield self.start + (self.end - self.start) * (number + 1) / count
            elif isinstance(self.value, list):
                yield self.value[number % len(self.value)]
            else:
                yield math.nan if self.value is None else self.value


class Story(BaseModel):
    """One file."""

    model_config = ConfigDict(extra="forbid")

    story: str
    why: str
    limits: LimitSettings
    frame_s: float = 1.0
    pieces: bool = False
    life: Annotated[list[Step], Field(min_length=1)]


def read(path: Path) -> Story:
    """Read one story."""
    return Story.model_validate(yaml.safe_load(path.read_text(encoding="utf-8")))


def readings(story: Story, step: Step, start_ns: int) -> Iterator[Reading]:
    """Return the values of *step*."""
    every_s = step.every_s or story.frame_s
    count = round((step.for_s or 0.0) / every_s)
    assert count * every_s == pytest.approx(step.for_s or 0.0), f"{step.for_s:g} s are no whole number of values"
    quality = Quality.GOOD
    if step.cause is not None:
        quality = Quality.UNCERTAIN if step.cause in MAY_RAISE else Quality.BAD
    for number, value in enumerate(step.values(count), start=1):
        yield Reading(
            time_ns=start_ns + round(number * every_s * SECOND_NS),
            machine=POINT.machine,
            point=POINT.point,
            measure=MEASURE,
            value=value,
            span_s=story.frame_s,
            quality=quality,
            cause=step.cause,
            piece=story.pieces,
        )


def live(story: Story, *, restarts: bool = False) -> Iterator[tuple[list[Transition], list[AlarmState]]]:
    """Yield, step by step, what the alarms of *story* tell and where they stand."""
    plans = plan_alarms(POINT, MEASURE, story.frame_s, story.limits)
    book = Book(plans, name)
    now_ns = 0
    for step in story.life:
        told: list[Transition] = []
        if step.do is not None:
            event, alarm = step.do.split()
            one = book.act(AlarmId(POINT.machine, POINT.point, MEASURE, AlarmType(alarm)), Event(event), now_ns)
            told += [one] if one else []
        for reading in readings(story, step, now_ns):
            if restarts:
                book = Book(plans, name, {alarm: again(state) for alarm, state in book.states.items()})
            told += book.feed(reading)
        now_ns += round((step.for_s or 0.0) * SECOND_NS)
        yield told, list(book.states.values())


def line(transition: Transition) -> str:
    """Return *transition* as stories have it."""
    minutes, seconds = divmod(transition.time_ns / SECOND_NS, 60)
    hours, minutes = divmod(int(minutes), 60)
    head = f"{hours:02}:{minutes:02}:{seconds:02g} {transition.alarm.type}: {transition.before}"
    if transition.before is transition.after:
        return f"{head}, {'known' if transition.verified else 'not known'}"
    return f"{head} -> {transition.after}{'' if transition.verified else ', not known'}"


@pytest.mark.parametrize("path", FILES, ids=lambda path: path.stem)
def test_the_alarms_tell_what_the_story_says(path: Path) -> None:
    """Each step brings exactly the transitions that are written at it, at the second that is written."""
    story = read(path)
    for number, (step, (told, _)) in enumerate(zip(story.life, live(story), strict=True), start=1):
        assert [line(one) for one in told] == step.tells, f"step {number} of {story.story}"


@pytest.mark.parametrize("path", FILES, ids=lambda path: path.stem)
def test_a_restart_at_any_point_of_a_story_changes_nothing(path: Path) -> None:
    """Stopped, written, read back and started before every single value, the alarms live the same life."""
    story = read(path)
    whole, restarted = (
        [([(line(one), one.occurrence) for one in told], states) for told, states in live(story, restarts=restarts)]
        for restarts in (False, True)
    )
    assert restarted == whole


def test_each_story_says_why_it_matters() -> None:
    """A story is there for its readers: it has a name of its own and a reason."""
    stories = [read(path) for path in FILES]
    assert len({story.story for story in stories}) == len(stories)
    assert all(len(story.why.split()) > 10 for story in stories)


@pytest.mark.parametrize(
    "step",
    [
        {"for_s": 1},
        {"for_s": 1, "value": 1, "from": 1, "to": 2},
        {"for_s": 1, "from": 1},
        {"for_s": 1, "value": 1, "do": "acknowledge high"},
        {"do": "acknowledge low"},
        {"for_s": 1, "valeu": 1},
        {"for_s": 1, "cause": "broken"},
    ],
)
def test_a_step_that_cannot_be_understood_is_refused(step: dict[str, object]) -> None:
    """A slip of the pen must not make a story that checks nothing."""
    with pytest.raises(ValidationError):
        Step.model_validate(step)
