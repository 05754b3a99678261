"""YAML text as plain data that remembers the line of every key and item. Knows no settings."""

import datetime as dt
import json
import re
from collections.abc import Mapping
from dataclasses import dataclass
from typing import NoReturn, TypeAlias

import yaml
from yaml.reader import ReaderError

from humbell.config.messages import Path, problem, shown
from humbell.model import ConfigError

Value: TypeAlias = "str | int | float | dt.date | list[Value] | dict[str, Value] | None"

MAX_VALUES = 200_000  # with all aliases expanded: ten times a site of a hundred machines; an alias bomb has millions
MAX_DEPTH = 40  # levels of nesting: settings need about eight, and reading recurses, three calls a level

_SURROGATE = re.compile("[\ud800-\udfff]")
_YAML = "tag:yaml.org,2002:"
_MERGE = f"{_YAML}merge"
# A bare '=' has a tag of its own in YAML 1.1, and so has '<<' where it is no key; both are text here.
_TEXTS = {f"{_YAML}str", f"{_YAML}value", _MERGE}
_KINDS = {
    f"{_YAML}int": "a number",
    f"{_YAML}float": "a number",
    f"{_YAML}bool": "true or false",
    f"{_YAML}timestamp": "a date",
    f"{_YAML}null": "nothing",
}

# What PyYAML says -> what it means. START is the line in which the unfinished part began.
_EXPLANATIONS = {
    "found character '\\t'": "a tab stands where only spaces may (indent and separate with spaces)",
    "cannot start any token": "a value cannot begin with this sign (put the value in quotes)",
    "mapping values are": "a ':' stands where none may (check the indent and the key before; quote text with ': ')",
    "scanning a simple key": "a key has no ':' behind it (write KEY: VALUE; the key began in line START)",
    "expected <block end>": "the line does not fit those before it (indent it like them; they began in line START)",
    "expected ',' or ']'": "a ',' or ']' is missing (the list began in line START)",
    "expected ',' or '}'": "a ',' or '}' is missing (the mapping began in line START)",
    "unexpected end of stream": "a quote is not closed (write it behind the text)",
    "unexpected document separator": "a quote is not closed (write it behind the text)",
    "undefined alias": "an alias '*NAME' has no anchor before it (write '&NAME' where the value stands first)",
    "duplicate anchor": "an anchor '&NAME' stands in line START already (name each anchor differently)",
    "another document": "a second document begins with '---' (keep one document a file)",
    "expected '<document start>'": "something stands behind the end of the settings (take it out)",
    "nested too deeply": f"the values are nested more than {MAX_DEPTH} levels deep (take levels out)",
}


@dataclass(frozen=True, slots=True)
class Tree:
    """
    The content of one configuration file.

    Args:
        data: the top-level mapping: text, numbers, booleans, dates, lists and mappings with text as keys.

        lines: the line, from 1, of every path in *data*: that of the key for an entry of a mapping, that of
            the item for an item of a list. What came by an alias, a merge key or a template keeps the line
            where it was really written.

        name: of the file, as messages give it.
    """

    data: dict[str, Value]
    lines: Mapping[Path, int]
    name: str = "configuration"

    def line(self, path: Path) -> int:
        """Return the line of *path*, or of the closest thing around it that has one."""
        while path and path not in self.lines:
            path = path[:-1]
        return self.lines.get(path, 1)


class TreeError(ConfigError):
    """
    The text is no proper configuration.

    Args:
        problems: all of them, one line each.

        tree: what could be read all the same, for those who look for further problems; None where nothing could.
    """

    def __init__(self, *problems: str, tree: Tree | None = None) -> None:
        super().__init__(*problems)
        self.tree = tree


def read_tree(text: str, name: str) -> Tree:
    """
    Read YAML.

    Values are what PyYAML's SafeLoader makes of them: a bare ``off`` is False, a bare ``2026-01-14`` a date.
    Anchors, aliases and merge keys work; tags other than those of plain values do not.

    Args:
        text: the whole file.

        name: of the file, for messages.

    Raises:
        TreeError: *text* is no YAML, or has keys that stand twice or are no text, values that cannot be
            read, tags, several documents, no mapping at the top, or too many or too deeply nested values. It
            holds all of these at once, sorted by line; a syntax error hides what stands behind it.
    """
    loader, root = _compose(text, name)
    if root is None or (isinstance(root, yaml.ScalarNode) and not root.value):
        raise TreeError(problem(name, 1, (), "the file is empty (write the settings into it)"))
    builder = _Builder(loader, name)
    data = builder.value(root, ())
    if not builder.problems and not isinstance(data, dict):
        builder.note(root, (), "the file holds no settings (write KEY: VALUE lines at the left edge)")
    if builder.problems or not isinstance(data, dict):
        told = sorted(builder.problems.values(), key=lambda item: item[0])
        rest = Tree(data, builder.lines, name) if isinstance(data, dict) else None
        raise TreeError(*(problem(name, *item) for item in told), tree=rest)
    return Tree(data, builder.lines, name)


class _Loader(yaml.SafeLoader):
    """PyYAML's loader with a bound on the nesting, which it would follow until the stack is full."""

    _depth = 0

    def compose_node(self, parent: yaml.Node | None, index: int) -> yaml.Node | None:
        self._depth += 1
        if self._depth > MAX_DEPTH:
            mark = self.peek_event().start_mark  # type: ignore[no-untyped-call]
            raise yaml.MarkedYAMLError(problem="nested too deeply", problem_mark=mark)
        node = super().compose_node(parent, index)
        self._depth -= 1
        return node


def _compose(text: str, name: str) -> tuple[_Loader, yaml.Node | None]:
    """Return the loader and the root node, None where there is nothing but comments."""
    loader = None
    try:
        loader = _Loader(text)
        return loader, loader.get_single_node()
    except ReaderError as error:
        before = text[: error.position]
        line, column = before.count("\n") + 1, error.position - before.rfind("\n")
        what = "a control character stands here (take it out)"
    except yaml.MarkedYAMLError as error:
        said = f"{error.context or ''}; {error.problem or ''}".removeprefix("; ")
        # Where a quote is open to the end of the file, its beginning is the place to look at.
        mark = error.context_mark if "unexpected" in said and error.context_mark else error.problem_mark
        line, column = (mark.line + 1, mark.column + 1) if mark else (1, 1)
        meanings = (meaning for words, meaning in _EXPLANATIONS.items() if words in said)
        what = next(meanings, f"this is no YAML: {said} (correct the line)")
        what = what.replace("START", str(error.context_mark.line + 1 if error.context_mark else line))
    except (ValueError, OverflowError):
        # PyYAML passes on what int() and chr() say to absurd version numbers and escapes.
        line, column = (loader.line + 1, loader.column + 1) if loader else (1, 1)
        what = r"a number or an escape behind a '\' is out of range (correct it)"
    raise TreeError(problem(name, line, (), f"column {column}: {what}"))


_Entries = dict[str, tuple[yaml.Node, yaml.Node]]  # key and value nodes by key


class _Builder:
    """
    Turns nodes into data, and notes lines and problems on the way.

    Problems are kept by node: what aliases repeat is one problem.
    """

    def __init__(self, loader: _Loader, name: str) -> None:
        self.lines: dict[Path, int] = {(): 1}
        self.problems: dict[int, tuple[int, Path, str]] = {}
        self._loader = loader
        self._name = name
        self._values = 0
        self._open: list[yaml.Node] = []

    def note(self, node: yaml.Node, path: Path, text: str) -> None:
        """Keep a problem with *node*, unless it has one already."""
        self.problems.setdefault(id(node), (_line(node), path, text))

    def value(self, node: yaml.Node, path: Path) -> Value:
        """Return what *node* stands for; what stands in place of a faulty value does not matter."""
        if isinstance(node, yaml.ScalarNode):
            self._count(node, path)
            return self._scalar(node, path)
        if not self._enter(node, path):
            return None
        data: Value
        if isinstance(node, yaml.MappingNode):
            data = {}
            for key, (key_node, value_node) in self._entries(node, path).items():
                self.lines[*path, key] = _line(key_node)
                data[key] = self.value(value_node, (*path, key))
        else:
            data = []
            for index, item in enumerate(node.value):
                self.lines[*path, index] = _line(item)
                data.append(self.value(item, (*path, index)))
        self._open.pop()
        return data

    def _entries(self, node: yaml.MappingNode, path: Path) -> _Entries:
        """Return the entries that merge keys bring, then the mapping's own, which win."""
        merged: _Entries = {}
        own: _Entries = {}
        for key_node, value_node in node.value:
            merges = key_node.tag == _MERGE
            key = "<<" if merges else self._key(key_node, path)
            if key in own:
                text = f"the key stands in line {_line(own[key][0])} already (keep one of the two)"
                self.note(key_node, (*path, key), text)
                self.value(value_node, (*path, key))  # for the problems in it
                continue
            own[key] = (key_node, value_node)
            if merges:
                merged = self._merged(value_node, path)
        return merged | {key: nodes for key, nodes in own.items() if nodes[0].tag != _MERGE}

    def _merged(self, node: yaml.Node, path: Path) -> _Entries:
        merged: _Entries = {}
        for source in node.value if isinstance(node, yaml.SequenceNode) else [node]:
            if not isinstance(source, yaml.MappingNode):
                text = "this cannot be merged (give an alias of a mapping, or a list of such)"
                self.note(source, (*path, "<<"), text)
            elif self._enter(source, path):
                merged = self._entries(source, path) | merged
                self._open.pop()
        return merged

    def _key(self, node: yaml.Node, path: Path) -> str:
        if not isinstance(node, yaml.ScalarNode):
            self.note(node, path, "a list or mapping stands where a key has to (write text; quote '{' and '[')")
            return "?"
        key = str(node.value)
        if node.tag in _KINDS:
            text = f"the key is read as {_KINDS[node.tag]} (write it in quotes: {json.dumps(key)})"
            self.note(node, (*path, key), text)
        elif node.tag not in _TEXTS:
            self._refuse_tag(node, (*path, key))
        self._check_text(node, (*path, key))
        return key

    def _scalar(self, node: yaml.ScalarNode, path: Path) -> Value:
        if node.tag in _TEXTS:
            self._check_text(node, path)
            return str(node.value)
        if node.tag not in _KINDS:
            self._refuse_tag(node, path)
            return None
        try:
            value: Value = self._loader.construct_object(node)
        except (yaml.YAMLError, ValueError, OverflowError, LookupError, AttributeError):
            # What the constructors say to 2026-13-45, 0x_, !!bool perhaps or !!timestamp soon.
            text = f"{shown(node.value)} cannot be read as {_KINDS[node.tag]} (correct it, or put text in quotes)"
            self.note(node, path, text)
            return None
        return value

    def _check_text(self, node: yaml.ScalarNode, path: Path) -> None:
        if _SURROGATE.search(node.value):
            self.note(node, path, rf"{shown(node.value)} holds half a character (correct its \u escape)")

    def _enter(self, node: yaml.Node, path: Path) -> bool:
        """Add *node* to the open ones, if it may be opened."""
        self._count(node, path)
        if node.tag != _YAML + ("map" if isinstance(node, yaml.MappingNode) else "seq"):
            self._refuse_tag(node, path)
            return False
        if any(node is other for other in self._open):
            self.note(node, path, "an alias in it leads back to itself (write the value out)")
            return False
        if len(self._open) >= MAX_DEPTH:
            self._stop(node, path, f"aliases nest it more than {MAX_DEPTH} levels deep (write the value out)")
        self._open.append(node)
        return True

    def _refuse_tag(self, node: yaml.Node, path: Path) -> None:
        self.note(node, path, f"the tag {node.tag.replace(_YAML, '!!', 1)!r} is not allowed (take it out)")

    def _count(self, node: yaml.Node, path: Path) -> None:
        self._values += 1
        if self._values > MAX_VALUES:
            self._stop(node, path, f"aliases expand it to more than {MAX_VALUES} values (use fewer aliases)")

    def _stop(self, node: yaml.Node, path: Path, text: str) -> NoReturn:
        raise TreeError(problem(self._name, _line(node), path[:1], text))


def _line(node: yaml.Node) -> int:
    return int(node.start_mark.line) + 1
