import pytest
import yaml

from humbell.config.templates import apply_templates
from humbell.config.tree import Tree, read_tree
from humbell.model import ConfigError

SITE = """\
site: tarnholm-water
templates:
  pump:
    group: pumps
    points:
      de-h:
        mount: stud
        velocity: {band_hz: [10, 1000], high: 4.5}
        acceleration: {high: 2.0}
      nde-h:
        mount: stud
  big-pump:
    template: pump
    points:
      de-h:
        velocity: {high: 7.1}
      nde-h: null
machines:
  p-101:
    template: pump
    points:
      de-h:
        channel: daq-a/0
        velocity:
          band_hz: [2, 1000]
        acceleration: null
  p-102:
    template: big-pump
    group: large
  f-1:
    group: fans
"""


def read(text: str) -> Tree:
    return apply_templates(read_tree(text, "site.yaml"))


def problems(text: str) -> tuple[str, ...]:
    with pytest.raises(ConfigError) as caught:
        read(text)
    return caught.value.problems


def test_a_machine_is_laid_over_its_template() -> None:
    """Mappings are merged key by key, lists and scalars replaced, and null leaves out what the template has."""
    assert read(SITE).data == {
        "site": "tarnholm-water",
        "machines": {
            "p-101": {
                "group": "pumps",
                "points": {
                    "de-h": {
                        "mount": "stud",
                        "velocity": {"band_hz": [2, 1000], "high": 4.5},
                        "channel": "daq-a/0",
                    },
                    "nde-h": {"mount": "stud"},
                },
            },
            "p-102": {
                "group": "large",
                "points": {
                    "de-h": {
                        "mount": "stud",
                        "velocity": {"band_hz": [10, 1000], "high": 7.1},
                        "acceleration": {"high": 2.0},
                    },
                },
            },
            "f-1": {"group": "fans"},
        },
    }


def test_every_merged_value_keeps_the_line_where_it_was_written() -> None:
    """Lines lead to the template for what came from it, and there are none for what is not in the result."""
    tree = read(SITE)
    point = ("machines", "p-101", "points", "de-h")
    assert tree.name == "site.yaml"
    assert tree.line(()) == 1
    assert tree.line(("machines", "p-101")) == 19
    assert tree.line(point) == 22
    assert tree.line((*point, "channel")) == 23
    assert tree.line((*point, "mount")) == 7
    assert tree.line((*point, "velocity")) == 24
    assert tree.line((*point, "velocity", "high")) == 8
    assert tree.line((*point, "velocity", "band_hz")) == 25
    assert tree.line((*point, "velocity", "band_hz", 0)) == 25
    assert tree.line(("machines", "p-102", "group")) == 29
    assert tree.line(("machines", "p-102", "points", "de-h", "velocity", "high")) == 16
    assert tree.line(("machines", "p-102", "points", "de-h", "acceleration", "high")) == 9
    assert not any("templates" in path or "template" in path for path in tree.lines)
    assert (*point, "acceleration") not in tree.lines


def test_a_value_replaces_a_mapping_and_the_other_way_round() -> None:
    """Only two mappings are merged; otherwise the machine's own value stands alone."""
    text = "templates:\n  t: {a: {x: 1}, b: 1, c: [1, 2]}\nmachines:\n  m: {template: t, a: 5, b: {y: 2}, c: [3]}\n"
    assert read(text).data == {"machines": {"m": {"a": 5, "b": {"y": 2}, "c": [3]}}}


def test_null_leaves_out_only_what_a_template_has() -> None:
    """A null that has nothing to leave out stays, for the validation to judge."""
    text = "templates:\n  t: {a: 1}\nmachines:\n  m: {template: t, a: null, b: null}\n"
    assert read(text).data == {"machines": {"m": {"b": None}}}


@pytest.mark.parametrize(
    "text",
    [
        "site: x\nmachines:\n  p-101: {group: a, points: [1, {b: 2}]}\n  p-102: 5\n",
        "site: x\nmachines: 7\nview: {listen: here}\n",
        "site: x\n",
    ],
)
def test_a_file_without_templates_stays_as_it_is(text: str) -> None:
    """Values and lines are those of the file; machines that are no mappings are left to the validation."""
    tree = read_tree(text, "site.yaml")
    assert apply_templates(tree) == tree


def test_templates_may_be_empty_or_unused() -> None:
    """A template that no machine names is fine, and so is a list of templates whose lines are all comments."""
    assert read("templates:\n  t: {a: 1}\nsite: x\n").data == {"site": "x"}
    assert read("templates:\nsite: x\n").data == {"site": "x"}
    assert read("templates:\n  t: {a: 1}\nmachines:\n  m: {template: null, b: 1}\n").data == {
        "machines": {"m": {"b": 1}}
    }


def test_templates_that_are_not_known_are_all_told_with_the_likely_one() -> None:
    """Unknown names in machines and in templates come together, sorted by line."""
    text = (
        "machines:\n  m: {template: pmup}\n  n: {template: 5}\n"
        "templates:\n  pump: {template: fna}\n  fan: {}\n  list: [1]\n"
    )
    advice = "known: pump, fan, list"
    assert problems(text) == (
        f"site.yaml:2: machines.m.template: 'pmup' is no template (did you mean 'pump'? {advice})",
        f"site.yaml:3: machines.n.template: 5 is no template ({advice})",
        f"site.yaml:5: templates.pump.template: 'fna' is no template (did you mean 'fan'? {advice})",
        "site.yaml:7: templates.list: a list stands where a mapping has to (write settings of a machine below it)",
    )


def test_a_template_in_a_file_without_templates_is_told_so() -> None:
    """Where there is nothing to choose from, no list of known names is given."""
    assert problems("machines:\n  m: {template: pump}\n") == (
        "site.yaml:2: machines.m.template: 'pump' is no template (there are no templates in this file)",
    )


def test_templates_have_to_be_a_mapping() -> None:
    """Templates stand under their names."""
    assert problems("templates: [pump]\nsite: x\n") == (
        "site.yaml:1: templates: a list stands where a mapping has to (write NAME: and settings below)",
    )


def test_each_circle_of_templates_is_told_once() -> None:
    """Templates that are based on each other have no bottom; one that only leads into the circle is not to blame."""
    text = (
        "templates:\n  z: {template: a}\n  a: {template: b}\n  b: {template: c}\n  c: {template: a}\n"
        "  self: {template: self}\nmachines:\n  m: {template: z}\n  n: {template: b}\n"
    )
    told, advice = "the template leads back to itself", "(base one of them on none)"
    assert problems(text) == (
        f"site.yaml:3: templates.a.template: {told}: a > b > c > a {advice}",
        f"site.yaml:6: templates.self.template: {told}: self > self {advice}",
    )


def test_templates_that_expand_without_measure_are_refused() -> None:
    """Many machines times a large template is bounded as aliases are."""
    template = {"t": {f"k{i}": i for i in range(1000)}}
    machines = {f"m{i}": {"template": "t"} for i in range(250)}
    (message,) = problems(yaml.safe_dump({"templates": template, "machines": machines}))
    assert "templates expand to more than 200000 values" in message


def test_a_merge_leaves_the_tree_that_it_reads_as_it_was() -> None:
    """The merged tree shares no list or mapping with the one before."""
    tree = read_tree(SITE, "site.yaml")
    merged = apply_templates(tree)
    assert tree == read_tree(SITE, "site.yaml")
    assert merged.data["machines"] is not tree.data["machines"]
