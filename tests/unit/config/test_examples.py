"""The files in configs/: each can be used as it is, and node.yaml shows every setting with its true default."""

import re
from collections.abc import Iterable
from pathlib import Path
from typing import get_args, get_origin

import pytest
from pydantic import BaseModel

from humbell.app.plan import plan
from humbell.config import Site, load, parse
from humbell.config.templates import apply_templates
from humbell.config.tree import Value, read_tree

CONFIGS = Path(__file__).resolve().parents[3] / "configs"
NODE = (CONFIGS / "node.yaml").read_text(encoding="utf-8")

# A key behind a '#' is a default; keys begin with a small letter, and no line of prose begins with one and a ':'.
DEFAULT_LINE = re.compile(r"^( *)# ( *)([a-z][A-Za-z0-9_]*:(?: .*)?)$", re.MULTILINE)
WITHOUT_MARKS = DEFAULT_LINE.sub(r"\1\2\3", NODE)

Field = tuple[type[BaseModel], str]
Place = tuple[str, ...]


def models_in(annotation: object) -> list[type[BaseModel]]:
    """Return our models that a value of this type may hold, unions and mappings included; plug-ins' are their own."""
    if isinstance(annotation, type) and issubclass(annotation, BaseModel):
        return [annotation] if annotation.__module__.startswith("humbell.") else []
    return [model for inner in get_args(annotation) for model in models_in(inner)]


def fields_of(model: type[BaseModel]) -> set[Field]:
    """Return all fields of *model* and of every model that can be reached from it."""
    found: set[Field] = set()
    for name, field in model.model_fields.items():
        found.add((model, name))
        for inner in models_in(field.annotation):
            found |= fields_of(inner)
    return found


def is_of(model: type[BaseModel], data: Value) -> bool:
    """Return whether *data* is for *model*, and not for one of another kind."""
    kind = model.model_fields.get("kind")
    return isinstance(data, dict) and (kind is None or data.get("kind") in get_args(kind.annotation))


def shown(model: type[BaseModel], data: dict[str, Value], path: Place = ()) -> dict[Place, Field]:
    """Return the fields that stand in *data*, a file's content for *model*, by their paths."""
    found: dict[Place, Field] = {}
    for name, value in data.items():
        field = model.model_fields[name]
        here = (*path, name)
        found[here] = (model, name)
        parts = {here: value}
        if get_origin(field.annotation) is dict and isinstance(value, dict):
            parts = {(*here, key): part for key, part in value.items()}
        for inner in models_in(field.annotation):
            for at, part in parts.items():
                if isinstance(part, dict) and is_of(inner, part):
                    found |= shown(inner, part, at)
    return found


def shown_in(text: str) -> dict[Place, Field]:
    """Return the fields that stand in the file *text*, templates applied."""
    return shown(Site, apply_templates(read_tree(text, "node.yaml")).data)


def names(fields: Iterable[Field]) -> list[str]:
    """Return *fields* as a reader would call them."""
    return sorted(f"{model.__name__}.{name}" for model, name in fields)


@pytest.mark.parametrize("path", sorted(CONFIGS.iterdir()), ids=lambda path: path.name)
def test_every_example_can_be_used(path: Path) -> None:
    """Each file is a configuration without a fault, plays in the Tarnholm Water works, and watches something."""
    found = load(path)
    assert found.site.site == "tarnholm-water"
    assert "invented Tarnholm Water works" in path.read_text(encoding="utf-8")
    assert plan(found.site).judged > 0


def test_commented_out_lines_are_the_defaults() -> None:
    """Without the marks before them the file means exactly the same."""
    assert len(DEFAULT_LINE.findall(NODE)) > 40
    assert parse(WITHOUT_MARKS, "node.yaml") == parse(NODE, "node.yaml")


def test_every_setting_stands_in_the_example() -> None:
    """A setting that users cannot find does not exist for them: each field of each model is in node.yaml."""
    assert names(fields_of(Site) - set(shown_in(WITHOUT_MARKS).values())) == []


def test_every_default_stands_in_the_example_as_a_commented_out_line() -> None:
    """Whatever has a default is shown with it."""
    given = shown_in(NODE)
    commented = {field for path, field in shown_in(WITHOUT_MARKS).items() if path not in given}
    optional = {
        (model, name)
        for model, name in fields_of(Site)
        if not model.model_fields[name].is_required()
        and get_origin(model.model_fields[name].annotation) is not dict  # none by default: its entries are the example
    }
    assert names(optional - commented) == []


def test_the_example_carries_the_cautions() -> None:
    """What Humbell is not, who decides on limits, and how sensors are fitted."""
    prose = " ".join(NODE.replace("#", " ").split()).lower()
    for words in (
        "it is no machine protection system",
        "no trip output and no safety integrity level",
        "claims conformity to no standard",
        "limits taken from tables are general guidance",
        "local codes and a qualified vibration analyst decide",
        "isolate and lock out",
        "guards in place",
        "hot surfaces",
        "cables clear of couplings",
    ):
        assert words in prose
