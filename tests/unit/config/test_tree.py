import datetime as dt

import pytest
from hypothesis import example, given
from hypothesis import strategies as st

from humbell.config.messages import known, path_text, shown
from humbell.config.tree import MAX_DEPTH, Tree, TreeError, read_tree
from humbell.model import ConfigError

SITE = """\
# a comment
site: tarnholm-water
machines:
  p-101:
    calibrated: 2026-01-14
    enabled: off
    band_hz: [10,
      1000]
    points:
      - de-h
      - {name: nde-v, "weight": 1.5}
"""


def problems(text: str) -> tuple[str, ...]:
    with pytest.raises(ConfigError) as caught:
        read_tree(text, "site.yaml")
    return caught.value.problems


def test_a_tree_holds_plain_values_and_the_line_of_every_key_and_item() -> None:
    """Values are what SafeLoader makes of them; each key and each item of a list has the line where it stands."""
    tree = read_tree(SITE, "site.yaml")
    assert tree.name == "site.yaml"
    assert tree.data == {
        "site": "tarnholm-water",
        "machines": {
            "p-101": {
                "calibrated": dt.date(2026, 1, 14),
                "enabled": False,
                "band_hz": [10, 1000],
                "points": ["de-h", {"name": "nde-v", "weight": 1.5}],
            },
        },
    }
    machine = ("machines", "p-101")
    assert tree.lines == {
        (): 1,
        ("site",): 2,
        ("machines",): 3,
        machine: 4,
        (*machine, "calibrated"): 5,
        (*machine, "enabled"): 6,
        (*machine, "band_hz"): 7,
        (*machine, "band_hz", 0): 7,
        (*machine, "band_hz", 1): 8,
        (*machine, "points"): 9,
        (*machine, "points", 0): 10,
        (*machine, "points", 1): 11,
        (*machine, "points", 1, "name"): 11,
        (*machine, "points", 1, "weight"): 11,
    }


def test_a_path_that_is_not_there_has_the_line_of_what_is_around_it() -> None:
    """The line of a missing key is that of the closest thing around it."""
    tree = read_tree(SITE, "site.yaml")
    assert tree.line(("machines", "p-101", "points", 1, "gain", "x")) == 11
    assert tree.line(("sources", "daq-a")) == 1
    assert Tree({}, {}).line(("site",)) == 1


def test_keys_that_stand_twice_are_all_named_with_both_lines() -> None:
    """Every duplicate key is a problem, at every level, and inside of a duplicate too; each names both lines."""
    text = "site: a\nmachines:\n  p-101: {}\n  p-101:\n    group: x\n    group: y\nsite: b\nsite: c\n"
    assert problems(text) == (
        "site.yaml:4: machines.p-101: the key stands in line 3 already (keep one of the two)",
        "site.yaml:6: machines.p-101.group: the key stands in line 5 already (keep one of the two)",
        "site.yaml:7: site: the key stands in line 1 already (keep one of the two)",
        "site.yaml:8: site: the key stands in line 1 already (keep one of the two)",
    )


@pytest.mark.parametrize(
    ("key", "kind"),
    [
        ("101", "a number"),
        ("1.5", "a number"),
        ("on", "true or false"),
        ("off", "true or false"),
        ("yes", "true or false"),
        ("No", "true or false"),
        ("~", "nothing"),
        ("2026-01-14", "a date"),
    ],
)
def test_a_key_that_yaml_reads_as_something_else_than_text_is_refused(key: str, kind: str) -> None:
    """A bare key that is no text in YAML 1.1 is a problem, which shows how to write it; in quotes it is text."""
    expected = f'site.yaml:2: machines.{key}: the key is read as {kind} (write it in quotes: "{key}")'
    assert problems(f"machines:\n  {key}: {{}}\n") == (expected,)
    assert read_tree(f'machines:\n  "{key}": {{}}\n', "site.yaml").data == {"machines": {key: {}}}


def test_a_list_or_mapping_cannot_be_a_key() -> None:
    """Placeholders of other tools (``{{ name }}``) read as mappings of mappings, which is told instead of a crash."""
    (text,) = problems("machines:\n  {{ name }}: {}\n")
    assert text.startswith("site.yaml:2: machines: a list or mapping stands where a key has to (")


@pytest.mark.parametrize(
    ("text", "expected"),
    [
        ("a: 1\n\tb: 2\n", "2: column 1: a tab stands where only spaces may ("),
        ("a:\n  b: 1\n c: 2\n", "3: column 2: the line does not fit those before it ("),
        ("a: b: c\n", "1: column 5: a ':' stands where none may ("),
        ("a: 1\nsite\n", "3: column 1: a key has no ':' behind it (write KEY: VALUE; the key began in line 2)"),
        ("a: [1,\n  2\nb: 3\n", "3: column 2: a ',' or ']' is missing (the list began in line 1)"),
        ("a: {b: 1\nc: 3\n", "2: column 2: a ',' or '}' is missing (the mapping began in line 1)"),
        ("a: 1\nb: 'x\nc: 3\n", "2: column 4: a quote is not closed ("),
        ("a: 1\nb: 'x\n---\nc: 3\n", "2: column 4: a quote is not closed ("),
        ("a: @x\n", "1: column 4: a value cannot begin with this sign ("),
        ("a: *x\n", "1: column 4: an alias '*NAME' has no anchor before it ("),
        ("a: &x 1\nb: &x 2\n", "2: column 4: an anchor '&NAME' stands in line 1 already ("),
        ("a: 1\n---\nb: 2\n", "2: column 1: a second document begins with '---' ("),
        ("{a: 1} b\n", "1: column 8: something stands behind the end of the settings ("),
        ("a: 1\nb: x\0\n", "2: column 5: a control character stands here ("),
        ('a: "\\UFFFFFFFF"\n', "1: column 7: a number or an escape behind a '\\' is out of range ("),
        ('a: "\\q"\n', "1: column 6: this is no YAML: "),
    ],
)
def test_what_is_no_yaml_is_told_with_line_column_and_a_plain_explanation(text: str, expected: str) -> None:
    """A syntax error gives one message, in words that need no knowledge of YAML's grammar."""
    (message,) = problems(text)
    assert message.startswith(f"site.yaml:{expected}")
    assert message.endswith(")")


@pytest.mark.parametrize("text", ["", "\n\n", "# only a comment\n", "---\n"])
def test_an_empty_file_is_refused(text: str) -> None:
    """A file without settings is a problem of its own, not a list of missing keys."""
    assert problems(text) == ("site.yaml:1: the file is empty (write the settings into it)",)


@pytest.mark.parametrize("text", ["\n- a\n- b\n", "\nsite\n", "\n5\n"])
def test_a_file_whose_top_is_no_mapping_is_refused(text: str) -> None:
    """The top of the file is a mapping of settings."""
    assert problems(text) == ("site.yaml:2: the file holds no settings (write KEY: VALUE lines at the left edge)",)


def test_tags_are_refused_with_their_line() -> None:
    """Tags could make objects of any kind: none but those of plain values is followed."""
    text = "a: !!python/object/apply:os.system [ls]\nb: {c: !secret x}\nd: !!binary aGk=\ne: !!set {x}\n"
    assert problems(text) == (
        "site.yaml:1: a: the tag '!!python/object/apply:os.system' is not allowed (take it out)",
        "site.yaml:2: b.c: the tag '!secret' is not allowed (take it out)",
        "site.yaml:3: d: the tag '!!binary' is not allowed (take it out)",
        "site.yaml:4: e: the tag '!!set' is not allowed (take it out)",
    )
    assert read_tree("a: !!str 101\nb: !!int '5'\n", "site.yaml").data == {"a": "101", "b": 5}


def test_values_that_cannot_be_read_are_all_told() -> None:
    """What looks like a date or number, or is tagged so, and is none, is a problem with its line."""
    text = 'a: 2026-13-45\nb: 0x_\nc: !!bool perhaps\nd: !!timestamp soon\ne: !!int ""\nf: "\\uD800"\n'
    assert problems(text) == (
        "site.yaml:1: a: '2026-13-45' cannot be read as a date (correct it, or put text in quotes)",
        "site.yaml:2: b: '0x_' cannot be read as a number (correct it, or put text in quotes)",
        "site.yaml:3: c: 'perhaps' cannot be read as true or false (correct it, or put text in quotes)",
        "site.yaml:4: d: 'soon' cannot be read as a date (correct it, or put text in quotes)",
        "site.yaml:5: e: '' cannot be read as a number (correct it, or put text in quotes)",
        "site.yaml:6: f: '\\ud800' holds half a character (correct its \\u escape)",
    )


def test_faults_of_different_kinds_are_told_at_once_and_in_order() -> None:
    """All problems of one file come together, sorted by line."""
    text = "a: {on: 1}\nb: 2026-02-30\na: 3\nc: !x 1\n"
    assert [line.split(":")[1] for line in problems(text)] == ["1", "2", "3", "4"]


def test_what_could_be_read_is_handed_over_with_the_problems() -> None:
    """Those who look for further problems get the rest of the file, and nothing where its form is unclear."""
    with pytest.raises(TreeError) as caught:
        read_tree("a: 2026-13-45\nb: {c: 1}\n", "site.yaml")
    assert caught.value.tree is not None
    assert caught.value.tree.data == {"a": None, "b": {"c": 1}}
    assert caught.value.tree.line(("b", "c")) == 2
    with pytest.raises(TreeError) as caught:
        read_tree("a: [\n", "site.yaml")
    assert caught.value.tree is None


def test_aliases_and_merge_keys_work_as_in_safeloader_and_keep_their_lines() -> None:
    """A mapping's own keys win over merged ones, earlier sources over later; lines say where each value was written."""
    text = (
        "base: &base\n  high: 4.5\n  hold_s: 10\n"
        "de-h:\n  <<: *base\n  high: 7.1\n"
        "de-v:\n  <<: [*base, {high: 1.0, low: 0.5}]\n"
        "de-a: *base\n"
    )
    tree = read_tree(text, "site.yaml")
    assert tree.data["de-h"] == {"high": 7.1, "hold_s": 10}
    assert tree.data["de-v"] == {"high": 4.5, "hold_s": 10, "low": 0.5}
    assert tree.data["de-a"] == {"high": 4.5, "hold_s": 10}
    assert tree.line(("de-h", "high")) == 6
    assert tree.line(("de-h", "hold_s")) == 3
    assert tree.line(("de-v", "low")) == 8
    assert tree.line(("de-a",)) == 9
    assert tree.line(("de-a", "high")) == 2


def test_a_fault_behind_an_anchor_is_told_once() -> None:
    """What aliases repeat is one problem, at the place where it was written."""
    assert len(problems("a: &a {x: 2026-13-45}\nb: *a\nc: {<<: *a}\n")) == 1


def test_only_mappings_can_be_merged() -> None:
    """A merge key takes one mapping or a list of mappings, and stands once."""
    text = "a: {<<: 5}\nb: &b {x: 1}\nc:\n  <<: *b\n  <<: *b\n"
    assert problems(text) == (
        "site.yaml:1: a.<<: this cannot be merged (give an alias of a mapping, or a list of such)",
        "site.yaml:5: c.<<: the key stands in line 4 already (keep one of the two)",
    )


@pytest.mark.parametrize("text", ["a: &a {x: *a}\n", "a: &a [*a]\n", "a: &a {<<: *a}\n", "a: &a {b: [{<<: *a}]}\n"])
def test_an_alias_that_leads_back_to_itself_is_refused(text: str) -> None:
    """A circle of aliases has no end."""
    (message,) = problems(text)
    assert message.endswith(": an alias in it leads back to itself (write the value out)")


@pytest.mark.parametrize("repeated", ["[{0},{0},{0},{0},{0},{0}]", "{{<<: [{0},{0},{0},{0},{0},{0}]}}"])
def test_aliases_that_expand_to_millions_of_values_are_refused(repeated: str) -> None:
    """A few lines of aliases of aliases can stand for more values than memory holds; merge keys, for as much time."""
    lines = [f"a{i}: &a{i} {repeated.format(f'*a{i - 1}')}" for i in range(1, 12)]
    (message,) = problems("\n".join(["a0: &a0 {}", *lines]))
    assert "more than 200000 values" in message


@pytest.mark.parametrize("unit", ["[", "{a: ", "- ", "? ", "[{b: "])
def test_deep_nesting_is_refused_and_never_exhausts_the_stack(unit: str) -> None:
    """Ten thousand brackets are a problem of the file like any other."""
    (message,) = problems(unit * 10_000)
    assert "more than 40 levels deep" in message


def test_aliases_cannot_nest_deeper_than_brackets_can() -> None:
    """The bound on the nesting holds for values behind aliases too."""
    lines = [f"a{i}: &a{i} [*a{i - 1}]" for i in range(1, MAX_DEPTH + 2)]
    (message,) = problems("\n".join(["a0: &a0 []", *lines]))
    assert "more than 40 levels deep" in message


TOKENS = ["a", "b: ", "- ", "\n", "\n  ", "\t", "[", "]", "{", "}", ", ", "? ", "'", '"', "\\", "&a ", "*a", "<<: "]
TOKENS += ["!!int ", "!x ", "!<", "%YAML 1.1\n", "---\n", "|\n", "#", "@", "on", "1", "2026-01-32", "=", "0x", "é"]


@pytest.mark.slow
@given(st.text() | st.lists(st.sampled_from(TOKENS)).map("".join))
@example("!!int ''")
@example("a: '\ud800'")
@example("%YAML " + "9" * 5000 + ".1\n--- {}")
def test_any_text_gives_a_tree_or_a_configuration_error(text: str) -> None:
    """No text makes the reader fail in another way, and every problem is one line that begins with file and line."""
    try:
        tree = read_tree(text, "site.yaml")
    except ConfigError as error:
        found = error.problems
    else:
        assert all(line >= 1 for line in tree.lines.values())
        return
    assert found
    for line in found:
        assert line.startswith("site.yaml:")
        assert len(line.splitlines()) == 1


def test_paths_values_and_advice_stay_on_one_line() -> None:
    """Keys and values with line ends in them are shown escaped, long ones shortened."""
    assert path_text(("machines", "p.1", "points", 0, "x")) == "machines.p.1.points[0].x"
    assert path_text(("a\nb", "")) == "'a\\nb'.''"
    assert shown("a\nb") == "'a\\nb'"
    assert shown("x" * 100) == "'" + "x" * 58 + "…"
    values: list[object] = [True, None, 4.5, {}, []]
    assert [shown(value) for value in values] == ["true", "nothing", "4.5", "a mapping", "a list"]
    assert known("hihg", ["low", "high"]) == "did you mean 'high'? known: low, high"
    assert known("x", []) == "known: none"
