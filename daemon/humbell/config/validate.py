"""Holds a tree against a pydantic model, and says in plain words and with lines what does not fit."""

import datetime as dt
import re
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from types import NoneType, UnionType
from typing import Annotated, TypeVar, Union, get_args, get_origin

from pydantic import BaseModel, Discriminator, RootModel, Tag, ValidationError
from pydantic.fields import FieldInfo
from pydantic_core import ErrorDetails, core_schema

from humbell.config.messages import Path, known, path_text, problem, shown
from humbell.config.tree import Tree, Value
from humbell.model import ConfigError, Id

M = TypeVar("M", bound=BaseModel)

_BUILT_IN = frozenset(get_args(core_schema.ErrorType))
_SWITCHES = frozenset({"on", "off", "yes", "no", "true", "false"})  # what YAML reads as true or false
_ID_PATTERN = get_args(Id)[1].pattern

# By pydantic's error type, or how it begins. {shown} is the value found, the others come from pydantic.
_TEXTS: dict[str | tuple[str, ...], str] = {
    "greater_than_equal": "{shown} is too small (give at least {ge})",
    "greater_than": "{shown} is too small (give more than {gt})",
    "less_than_equal": "{shown} is too large (give at most {le})",
    "less_than": "{shown} is too large (give less than {lt})",
    "multiple_of": "{shown} does not fit (give a multiple of {multiple_of})",
    "finite_number": "{shown} is not finite (give a finite number)",
    "string_too_short": "{shown} is too short (give at least {min_length} characters)",
    "string_too_long": "{shown} is too long (give at most {max_length} characters)",
    "string_pattern_mismatch": "{shown} does not have the right form (it has to match {pattern})",
    "too_short": "there are too few entries (give at least {min_length})",
    "too_long": "there are too many entries (give at most {max_length})",
    ("float_", "decimal_"): "{shown} is no number (write it such as 4.5, without a unit)",
    "int_": "{shown} is no whole number (write it such as 4, without a unit)",
    "bool_": "{shown} is neither true nor false (write true or false)",
    "string_": "{shown} stands where text has to (write it behind the ':')",
    "datetime_": "{shown} is no time (write it as 2026-01-14T08:30:00Z)",
    "date_": "{shown} is no date (write it as YYYY-MM-DD, such as 2026-01-14)",
    "time_delta_": "{shown} is no span of time (give it as a number of seconds)",
    "time_": '{shown} is no time of day (write it in quotes, such as "08:30")',
    "url_": "{shown} is no URL (write it such as https://HOST:PORT)",
    "ip_": "{shown} is no IP address (write it such as 127.0.0.1)",
    "path_": "{shown} is no path (write it such as /var/lib/humbell)",
    ("dict_", "mapping_", "model_", "dataclass_"): (
        "{shown} stands where a mapping has to (write KEY: VALUE lines below it, indented)"
    ),
    ("list_", "tuple_", "set_", "frozen_set_"): "{shown} stands where a list has to (write it as [FIRST, SECOND])",
}


@dataclass(frozen=True, slots=True)
class _Kind:
    """One of the types that a value may have, with the names that pydantic's *loc* may give it."""

    type: object
    labels: tuple[str, ...]


@dataclass(frozen=True, slots=True)
class _Place:
    """
    Where an error is.

    Args:
        path: in the file.

        fields: of the models around the last part of *path*, by the key in the file.

        labels: of the kinds that the value may have.

        in_union: it was found while one kind of several was tried.
    """

    path: Path
    fields: Mapping[str, FieldInfo]
    labels: Sequence[str]
    in_union: bool


def validate(model: type[M], tree: Tree, file: str) -> M:
    """
    Return the *model* with the content of *tree*.

    What validators of the model say in a ValueError is given as it is, each of its lines as a problem of its own. A
    line that begins with the path of a key below the model and ``: `` is told for that key.

    Args:
        model: of the whole file.

        tree: with templates applied.

        file: name of the file, for messages.

    Raises:
        ConfigError: *tree* does not fit. It holds one line for each error, sorted by line of the file.
    """
    try:
        return model.model_validate(tree.data)
    except ValidationError as error:
        details = error.errors(include_url=False)
    # Raised here and not above, so that pydantic's report, which shows all values, does not hang on to it.
    found = [(tree.line(path), path, text) for path, text in _found(model, tree, details)]
    raise ConfigError(*(problem(file, *item) for item in sorted(found, key=lambda item: item[0])))


def _found(model: type[BaseModel], tree: Tree, details: Iterable[ErrorDetails]) -> list[tuple[Path, str]]:
    found: list[tuple[Path, str]] = []
    in_unions: dict[Path, int] = {}
    for detail in details:
        place = _locate(model, tree.data, detail)
        if detail["type"] in {"value_error", "assertion_error"} or detail["type"] not in _BUILT_IN:
            text = str(detail.get("ctx", {}).get("error", detail["msg"]))
            found += [_aimed(tree, place.path, line) for line in text.splitlines() if line]
            continue
        path, text = _explain(detail, place)
        if place.in_union and path in in_unions:
            # Each kind that was tried has its complaint about the same value.
            before = found[in_unions[path]][1]
            found[in_unions[path]] = (path, before if text in before else f"{before}, or: {text}")
            continue
        if place.in_union:
            in_unions[path] = len(found)
        found.append((path, text))
    return found


def _aimed(tree: Tree, path: Path, text: str) -> tuple[Path, str]:
    """Return *text*, and the path of the key with which it begins, if it begins with one."""
    head, colon, rest = text.partition(": ")
    whole = path_text(path) + ("." if path and not head.startswith("[") else "") + head
    for place in tree.lines if colon else ():
        if place[: len(path)] == path and path_text(place) == whole:
            return place, rest
    return path, text


def _locate(model: type[BaseModel], data: Value, detail: ErrorDetails) -> _Place:
    """Follow pydantic's *loc* through the model's types, and drop what it names beside the keys of the file."""
    kinds = [_Kind(model, ())]
    fields: dict[str, FieldInfo] = {}
    steps: list[str | int] = []
    chosen = in_union = False
    for part in detail["loc"]:
        if part == "[key]":
            continue
        if len(kinds) > 1 and not chosen:
            kinds = _labelled(kinds, str(part))
            chosen = in_union = True
            continue
        chosen = False
        steps.append(part)
        fields = {key: field for kind in kinds for key, field in _fields(kind.type).items()}
        kinds = [inner for kind in kinds for inner in _inside(kind.type, part)]
    labels = [label for kind in kinds for label in kind.labels]
    return _Place(_existing(data, steps, missing=detail["type"] == "missing"), fields, labels, in_union)


def _existing(data: Value, steps: Sequence[str | int], *, missing: bool) -> Path:
    """Return what of *steps* is in *data*; the last step of a missing key need not be."""
    path: Path = ()
    for index, part in enumerate(steps):
        entries: dict[str | int, Value] = {}
        if isinstance(data, dict | list):
            entries = dict(data.items() if isinstance(data, dict) else enumerate(data))
        if part in entries:
            data = entries[part]
        elif not (missing and index == len(steps) - 1):
            continue
        path = (*path, part)
    return path


def _labelled(kinds: list[_Kind], label: str) -> list[_Kind]:
    names = [(kind, str(getattr(kind.type, "__name__", "?"))) for kind in kinds]
    exact = [kind for kind, name in names if label in kind.labels or label == name]
    # A label such as function-after[check(), Limit] has the name in it.
    return exact or [kind for kind, name in names if name in label] or kinds


def _kinds(annotation: object, marks: Iterable[object] = ()) -> list[_Kind]:
    """Return the types that *annotation* allows beside None; *marks* is what Annotated or a field adds to it."""
    marks = list(marks)
    arguments = get_args(annotation)
    if get_origin(annotation) is Annotated:
        return _kinds(arguments[0], [*marks, *arguments[1:]])
    if get_origin(annotation) in {Union, UnionType}:
        return [kind for inner in arguments if inner is not NoneType for kind in _kinds(inner, marks)]
    if isinstance(annotation, type) and issubclass(annotation, RootModel):
        root = annotation.model_fields["root"]
        return _kinds(root.annotation, [*marks, root, *root.metadata])
    labels = [mark.tag for mark in marks if isinstance(mark, Tag)]
    for mark in marks:
        by = mark.discriminator if isinstance(mark, FieldInfo | Discriminator) else None
        field = _fields(annotation).get(by) if isinstance(by, str) else None
        values = get_args(field.annotation) if field else ()
        labels += [str(getattr(value, "value", value)) for value in values]
    return [_Kind(annotation, tuple(labels))]


def _inside(kind: object, part: str | int) -> list[_Kind]:
    """Return the kinds of what stands under *part*; none where that cannot be told."""
    if field := _fields(kind).get(str(part)):
        return _kinds(field.annotation, [field, *field.metadata])
    arguments = get_args(kind)
    if get_origin(kind) is tuple and Ellipsis not in arguments:
        return _kinds(arguments[part]) if isinstance(part, int) and part < len(arguments) else []
    if get_origin(kind) is None or not arguments:
        return []
    return _kinds(arguments[1] if isinstance(part, str) and len(arguments) > 1 else arguments[0])


def _fields(kind: object) -> dict[str, FieldInfo]:
    """Return the fields of a model by the keys that they have in the file."""
    if not (isinstance(kind, type) and issubclass(kind, BaseModel)):
        return {}
    names = {name: field.validation_alias or name for name, field in kind.model_fields.items()}
    return {alias: kind.model_fields[name] for name, alias in names.items() if isinstance(alias, str)}


def _explain(detail: ErrorDetails, place: _Place) -> tuple[Path, str]:
    """Return the path and what to say of an error that pydantic has found by itself."""
    key = str(detail["loc"][-1]) if detail["loc"] else ""
    match detail["type"]:
        case "union_tag_invalid" | "union_tag_not_found":
            return _explain_tag(detail, place)
        case "missing":
            field = place.fields.get(key)
            about = f": {field.description.rstrip('.')}" if field and field.description else ""
            return place.path, f"is missing (add it{about})"
        case "extra_forbidden":
            return place.path, f"is not known here ({known(key, place.fields)})"
        case _ if detail["input"] is None:
            return place.path, "there is no value (give one, or take the key out)"
        case _:
            return place.path, _explain_value(detail)


def _explain_tag(detail: ErrorDetails, place: _Place) -> tuple[Path, str]:
    """Explain that the key that tells the kind of a mapping is missing or wrong, or that no kind fits."""
    context = detail["ctx"]
    by = context["discriminator"].strip("'")
    path = place.path if by.endswith("()") else (*place.path, by)
    if detail["type"] == "union_tag_invalid":
        expected = re.findall(r"'([^']*)'", context["expected_tags"])
        found = detail["input"].get(by) if isinstance(detail["input"], dict) else None
        tag = context["tag"]  # as text; a callable may have made it of something else
        return path, f"{shown(tag if found is None else found)} is not known ({known(tag, expected)})"
    kinds = ", ".join(dict.fromkeys(place.labels)) or "none"
    if path == place.path:
        return path, f"this is of no known kind (give one of: {kinds})"
    return path, f"is missing (add it: one of {kinds})"


def _explain_value(detail: ErrorDetails) -> str:
    kind, value, context = detail["type"], detail["input"], detail.get("ctx", {})
    if kind in {"literal_error", "enum"}:
        expected = re.findall(r"'([^']*)'", context["expected"]) or [context["expected"]]
        quotes = "put it in quotes; " if isinstance(value, bool) and not _SWITCHES.isdisjoint(expected) else ""
        return f"{shown(value)} is not known ({quotes}{known(str(value), expected)})"
    if kind == "string_type" and isinstance(value, bool | int | float | dt.date):
        others = "a date" if isinstance(value, dt.date) else "a number"
        return (
            f"{shown(value)} is read as {'true or false' if isinstance(value, bool) else others} (write it in quotes)"
        )
    if kind == "string_pattern_mismatch" and context["pattern"] == _ID_PATTERN:
        like = re.sub(r"[^a-z0-9._-]+", "-", str(value).lower()).strip("._-")[:64].strip("._-") or "p-101"
        return f"{shown(value)} is no id (use a-z, 0-9, '.', '_' and '-', such as {like})"
    numbers = {name: str(number).removesuffix(".0") for name, number in context.items()}
    texts = (text for beginning, text in _TEXTS.items() if kind.startswith(beginning))
    text = next(texts, "{shown} cannot be used: {message} (correct it)")
    return text.format(shown=shown(value), message=detail["msg"], **numbers)
