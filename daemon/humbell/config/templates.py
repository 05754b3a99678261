"""Lays machines over the templates that they name. Neither checks what stands in them nor fills in defaults."""

from collections.abc import Mapping, Sequence

from humbell.config.messages import Path, known, problem, shown
from humbell.config.tree import MAX_VALUES, Tree, Value
from humbell.model import ConfigError

_TEMPLATES, _TEMPLATE, _MACHINES = "templates", "template", "machines"

# A mapping or other value, and the path under which it was written.
_Layer = tuple[Value, Path]


def apply_templates(tree: Tree) -> Tree:
    """
    Return *tree* with every machine merged with its template, and without templates.

    Mappings are merged key by key; for anything else the machine's own value replaces that of the template. A key
    whose value in the machine is null leaves out what the template has under it. A template may name another in
    the same way.

    Raises:
        ConfigError: a template is no mapping, is not known, or leads back to itself. It holds all of these,
            sorted by line.
    """
    return _Merger(tree).merge()


class _Merger:
    """One run over one tree, which collects the new lines and the problems."""

    def __init__(self, tree: Tree) -> None:
        self._tree = tree
        self._lines: dict[Path, int] = {}
        self._problems: list[tuple[int, str]] = []
        self._templates: dict[str, dict[str, Value]] = {}
        self._values = 0

    def merge(self) -> Tree:
        self._read_templates()
        data: dict[str, Value] = {}
        for key, value in self._tree.data.items():
            if key == _MACHINES and isinstance(value, dict):
                self._keep_line((key,), (key,))
                data[key] = {name: self._machine(name, machine) for name, machine in value.items()}
            elif key != _TEMPLATES:
                data[key] = self._merged([(value, (key,))], (key,))
        if self._problems:
            raise ConfigError(*(text for _, text in sorted(self._problems, key=lambda item: item[0])))
        self._keep_line((), ())
        return Tree(data, self._lines, self._tree.name)

    def _read_templates(self) -> None:
        given = self._tree.data.get(_TEMPLATES)
        if given is None:
            return
        if not isinstance(given, dict):
            self._note((_TEMPLATES,), f"{shown(given)} stands where a mapping has to (write NAME: and settings below)")
            return
        for name, template in given.items():
            if isinstance(template, dict):
                self._templates[name] = template
            else:
                text = f"{shown(template)} stands where a mapping has to (write settings of a machine below it)"
                self._note((_TEMPLATES, name), text)
                self._templates[name] = {}
        for name in self._templates:
            self._check_chain(name)

    def _check_chain(self, start: str) -> None:
        """Note a template that is not known, and a circle once: at the template in it that stands first."""
        path = (_TEMPLATES, start)
        self._base(self._templates[start], path, report=True)
        chain = self._chain(start)
        last = self._base(self._templates[chain[-1]], (_TEMPLATES, chain[-1]))
        if last == start and start == min(chain, key=list(self._templates).index):
            text = " > ".join([*chain, start])
            self._note((*path, _TEMPLATE), f"the template leads back to itself: {text} (base one of them on none)")

    def _chain(self, name: str | None) -> list[str]:
        """Return *name* and the templates below it, each once."""
        chain: list[str] = []
        while name is not None and name not in chain:
            chain.append(name)
            name = self._base(self._templates[name], (_TEMPLATES, name))
        return chain

    def _base(self, owner: Mapping[str, Value], path: Path, *, report: bool = False) -> str | None:
        """Return the known template that *owner* names, None where there is none."""
        name = owner.get(_TEMPLATE)
        if isinstance(name, str) and name in self._templates:
            return name
        if name is not None and report:
            advice = known(str(name), self._templates) if self._templates else "there are no templates in this file"
            self._note((*path, _TEMPLATE), f"{shown(name)} is no template ({advice})")
        return None

    def _machine(self, name: str, machine: Value) -> Value:
        path = (_MACHINES, name)
        if not isinstance(machine, dict):
            return self._merged([(machine, path)], path)
        base = self._base(machine, path, report=True)
        written = [(machine, path), *((self._templates[key], (_TEMPLATES, key)) for key in self._chain(base))]
        layers = [({key: part for key, part in layer.items() if key != _TEMPLATE}, at) for layer, at in written]
        return self._merged(layers, path)

    def _merged(self, layers: Sequence[_Layer], target: Path) -> Value:
        """Return the first of *layers*; where it is a mapping, over those behind it. Lines are kept for *target*."""
        value, source = layers[0]
        self._values += 1
        if self._values > MAX_VALUES:
            text = f"templates expand to more than {MAX_VALUES} values (share the machines among several nodes)"
            raise ConfigError(problem(self._tree.name, self._tree.line(target[:2]), target[:2], text))
        self._keep_line(source, target)
        if isinstance(value, list):
            return [self._merged([(item, (*source, i))], (*target, i)) for i, item in enumerate(value)]
        if not isinstance(value, dict):
            return value
        mappings = [(value, source)]
        for part, path in layers[1:]:
            if not isinstance(part, dict):
                break
            mappings.append((part, path))
        merged: dict[str, Value] = {}
        for key in dict.fromkeys(key for part, _ in reversed(mappings) for key in part):
            found = [(part[key], (*path, key)) for part, path in mappings if key in part]
            left_out = found[0][0] is None and len(found) > 1
            if not left_out:
                merged[key] = self._merged(found, (*target, key))
        return merged

    def _keep_line(self, source: Path, target: Path) -> None:
        if source in self._tree.lines:
            self._lines[target] = self._tree.lines[source]

    def _note(self, path: Path, text: str) -> None:
        line = self._tree.line(path)
        self._problems.append((line, problem(self._tree.name, line, path, text)))
