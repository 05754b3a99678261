"""The life cycle against the state diagram of IEC 62682 / ISA-18.2, written out here a second time."""

import re

import pytest

from humbell.alarms import TABLE, Event, follow, in_alarm
from humbell.model import LifeCycle

STATES = dict(zip("ABCDEF", LifeCycle, strict=True))  # by the letters of the state diagram
LETTERS = {state: letter for letter, state in STATES.items()}
WORDS = {
    "alarm condition": Event.RAISE,
    "re-alarm": Event.RAISE,
    "return to normal": Event.RETURN,
    "acknowledge": Event.ACKNOWLEDGE,
    "operator reset": Event.RESET,
}

# Source: state diagram of IEC 62682 / ISA-18.2, as OPC 10000-9 retells it (4.8, E.3; LatchedState for F). Confidence:
# S2 read in two independent sources, S1 in one, M from memory only (re-alarm out of F: from memory as well).
DIAGRAM = """
A | normal | no alarm | alarm condition -> B                                            | S2
B | alarm  | open     | acknowledge -> C; return to normal -> D (E if latching)         | S2
C | alarm  | known    | return to normal -> A (F if latching); re-alarm -> B            | S2
D | normal | open     | acknowledge -> A; re-alarm -> B                                 | S2
E | normal | open     | acknowledge -> F; re-alarm -> B                                 | M
F | normal | known    | operator reset -> A; re-alarm -> B                              | S1
"""
ROWS = [[part.strip() for part in line.split("|")] for line in DIAGRAM.strip().splitlines()]

# A limit raises again only after it has returned, so this arrow cannot be walked by one, and is left out.
LEFT_OUT = {("C", Event.RAISE)}

# The whole answer: the state after raise, return, acknowledge and reset. What means nothing leaves the state as it is.
ANSWERS = {
    False: {"A": "BAAA", "B": "BDCB", "C": "CACC", "D": "BDAD", "E": "BEFE", "F": "BFFA"},
    True: {"A": "BAAA", "B": "BECB", "C": "CFCC", "D": "BDAD", "E": "BEFE", "F": "BFFA"},
}
PAIRS = [
    (latching, letter, event, answer[number])
    for latching, answers in ANSWERS.items()
    for letter, answer in answers.items()
    for number, event in enumerate(Event)
]

# Lives that walk along every arrow: r raise, n return to normal, k acknowledge, 0 reset.
KEYS = dict(zip("rnk0", Event, strict=True))
STORIES = {
    "acknowledged, then returned": (False, "A r B k C n A"),
    "returned before anybody looked, and raised again": (False, "A r B n D r B n D k A"),
    "latched, looked at, reset": (True, "A r B k C n F 0 A"),
    "latched before anybody looked": (True, "A r B n E k F 0 A"),
    "raised again out of both latched states": (True, "A r B n E r B k C n F r B n E k F 0 A"),
    "latching switched off while it is latched": (False, "E k F 0 A r B n D k A"),
    "latching switched off while it is latched, and raised again": (False, "E r B k C n A"),
    "latching switched off behind the acknowledgement": (False, "F r B k C n A"),
    "latching switched on behind the return": (True, "D k A r B k C n F 0 A"),
    "latching switched on behind the return, and raised again": (True, "D r B n E k F 0 A"),
}


def tell(latching: bool, story: str) -> None:
    """Follow *story*, and fail where the life cycle goes elsewhere."""
    first, *rest = story.split()
    state = STATES[first]
    for key, letter in zip(rest[::2], rest[1::2], strict=True):
        state = follow(state, KEYS[key], latching=latching)
        assert state is STATES[letter], f"{story}: {key} leads to {state}"


def tell_all() -> None:
    """Follow all stories."""
    for story in STORIES.values():
        tell(*story)


def test_the_six_states_are_those_of_the_diagram() -> None:
    """A to F, in the diagram's order, and in alarm are those whose process is (S2; E and F: M and S1)."""
    assert [row[0] for row in ROWS] == list(STATES)
    for letter, process, *_ in ROWS:
        assert in_alarm(STATES[letter]) is (process == "alarm")


def test_an_acknowledgement_is_open_where_the_name_says_so() -> None:
    """Names tell whether somebody has looked: the open ones end in unacknowledged, the known ones in acknowledged."""
    for letter, _, acknowledged, *_ in ROWS:
        name = STATES[letter].value
        assert name.endswith("unacknowledged") is (acknowledged == "open")
        assert (name.split("_")[-1] == "acknowledged") is (acknowledged == "known")


def test_the_table_is_the_diagram() -> None:
    """Every arrow of the diagram is a row of the table, and the table has no others."""
    expected = {}
    for letter, _, _, leaves_by, _ in ROWS:
        for arrow in leaves_by.split("; "):
            match = re.fullmatch(r"([a-z -]+) -> (\w)(?: \((\w) if latching\))?", arrow)
            assert match
            word, plain, latching = match.groups()
            if (letter, WORDS[word]) not in LEFT_OUT:
                expected[STATES[letter], WORDS[word]] = (STATES[plain], STATES[latching or plain])
    assert expected == TABLE


@pytest.mark.parametrize(("latching", "letter", "event", "answer"), PAIRS)
def test_every_event_has_its_answer_in_every_state(latching: bool, letter: str, event: Event, answer: str) -> None:
    """All 48 pairs of state and event, latching or not, lead where they are written to lead."""
    assert LETTERS[follow(STATES[letter], event, latching=latching)] == answer


@pytest.mark.parametrize("name", STORIES)
def test_a_life_goes_as_written(name: str) -> None:
    """Event by event, the alarm is in the state that the story has."""
    tell(*STORIES[name])


def test_without_a_word_an_alarm_does_not_latch() -> None:
    """Latching is asked for, never the default."""
    assert follow(LifeCycle.UNACKNOWLEDGED, Event.RETURN) is LifeCycle.RETURNED_UNACKNOWLEDGED


def spoilt() -> list[tuple[tuple[LifeCycle, Event], bool, LifeCycle]]:
    """Return every row with each wrong state in either of its columns."""
    return [
        (key, latching, wrong)
        for key, row in TABLE.items()
        for latching in (False, True)
        for wrong in LifeCycle
        if wrong is not row[latching]
    ]


def test_the_stories_notice_every_wrong_row(monkeypatch: pytest.MonkeyPatch) -> None:
    """Each of the rows, with each other state in it, spoils a story: no row stands there untried."""
    unnoticed = []
    for key, latching, wrong in spoilt():
        row = list(TABLE[key])
        row[latching] = wrong
        with monkeypatch.context() as patch:
            patch.setitem(TABLE, key, (row[0], row[1]))
            try:
                tell_all()
            except AssertionError:
                continue
        unnoticed.append((key, latching, wrong))
    assert unnoticed == []


def test_the_stories_notice_every_missing_row(monkeypatch: pytest.MonkeyPatch) -> None:
    """A row that is gone leaves the state as it was, and a story notices that, too."""
    for key in list(TABLE):
        with monkeypatch.context() as patch:
            patch.delitem(TABLE, key)
            with pytest.raises(AssertionError, match="leads to"):
                tell_all()
