"""The whole way from a configuration file to what it means, with every problem told at once."""

import hashlib
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path

from pydantic import TypeAdapter, ValidationError

from humbell.config.messages import Path as Place
from humbell.config.messages import known, problem
from humbell.config.plugins import SourceSettings
from humbell.config.site import Acceleration, Site, Velocity
from humbell.config.templates import apply_templates
from humbell.config.tree import Tree, TreeError, Value, read_tree
from humbell.config.validate import validate
from humbell.measures import Quantity, band_problem
from humbell.model import ChannelId, ConfigError

_SOURCE = TypeAdapter(SourceSettings)


@dataclass(frozen=True, slots=True)
class Loaded:
    """
    A configuration in force.

    Args:
        site: what it says.

        path: its file.

        digest: SHA-256 of the file, in hexadecimal; every stored thing knows under which configuration it was made.

        text: of the file.
    """

    site: Site
    path: Path
    digest: str
    text: str


def load(path: Path) -> Loaded:
    """
    Read a configuration file.

    Raises:
        ConfigError: it cannot be read or used; one line for each problem: file, line, path, what, and what to do.
    """
    try:
        content = path.read_bytes()
    except FileNotFoundError:
        raise ConfigError(f"{path}: there is no such file (check the name)") from None
    except OSError as error:
        raise ConfigError(f"{path}: cannot be read: {error.strerror} (check the name and the rights)") from None
    try:
        text = content.decode()
    except UnicodeDecodeError as error:
        line = content[: error.start].count(b"\n") + 1
        raise ConfigError(f"{path}:{line}: is no UTF-8 text (save it as UTF-8)") from None
    return Loaded(parse(text, str(path)), path, hashlib.sha256(content).hexdigest(), text)


def parse(text: str, name: str) -> Site:
    """
    Return what the configuration *text* says.

    Raises:
        ConfigError: see `load`.
    """
    problems: list[str] = []
    try:
        tree = read_tree(text, name)
    except TreeError as error:
        if error.tree is None:
            raise
        problems += error.problems
        tree = error.tree
    site = None
    try:
        tree = apply_templates(tree)
        for wrong in (_wrong_brokers, _wrong_channels, _wrong_rates):
            problems += (problem(name, tree.line(place), place, said) for place, said in wrong(tree))
        site = validate(Site, tree, name)
    except ConfigError as error:
        problems += error.problems
    if site is None or problems:
        raise ConfigError(*_in_order(problems, name))
    return site


def _in_order(problems: list[str], name: str) -> Iterator[str]:
    """Return the problems by line; what was read wrongly in a line is not told again by those who look later."""
    told: set[str] = set()
    numbered = [(_line(text, name), text) for text in problems]
    for _, text in sorted(numbered, key=lambda item: item[0]):
        place = text.rpartition(" (")[0].removeprefix(name).split(": ")
        key = ": ".join(place[:2])
        if key not in told:
            yield text
        told.add(key)


def _line(text: str, name: str) -> int:
    number = text.removeprefix(f"{name}:").partition(":")[0]
    return int(number) if number.isdigit() else 0


def _points(tree: Tree) -> Iterator[tuple[Place, dict[str, Value], ChannelId]]:
    """Return path, settings and channel of each point that has a channel. Other faults are passed over."""
    machines = tree.data.get("machines")
    for machine, settings in machines.items() if isinstance(machines, dict) else ():
        points = settings.get("points") if isinstance(settings, dict) else None
        for point, chosen in points.items() if isinstance(points, dict) else ():
            if not isinstance(chosen, dict):
                continue
            try:
                channel = ChannelId.parse(str(chosen.get("channel")))
            except ValueError:
                continue
            yield ("machines", machine, "points", point), chosen, channel


def _wrong_brokers(tree: Tree) -> Iterator[tuple[Place, str]]:
    """Find sources whose broker is not there."""
    sources, brokers = tree.data.get("sources"), tree.data.get("brokers", {})
    for name, settings in sources.items() if isinstance(sources, dict) else ():
        broker = settings.get("broker") if isinstance(settings, dict) and settings.get("kind") == "mqtt" else None
        if isinstance(broker, str) and isinstance(brokers, dict) and broker not in brokers:
            yield ("sources", name, "broker"), f"there is no broker '{broker}' ({known(broker, brokers)})"


def _wrong_channels(tree: Tree) -> Iterator[tuple[Place, str]]:
    """Find channels of sources that are not there, and channels that two points claim."""
    sources = tree.data.get("sources")
    if not isinstance(sources, dict):
        return
    owners: dict[ChannelId, str] = {}
    for path, _, channel in _points(tree):
        place = (*path, "channel")
        if channel.source not in sources:
            yield place, f"there is no source '{channel.source}' ({known(channel.source, sources)})"
        elif channel in owners:
            yield place, f"{channel} is the channel of {owners[channel]} already (give each point its own)"
        owners.setdefault(channel, f"{path[1]}/{path[3]}")


def _wrong_rates(tree: Tree) -> Iterator[tuple[Place, str]]:
    """Find bands that the rate of their source cannot carry, where the rate is known beforehand."""
    sources = tree.data.get("sources")
    for path, chosen, channel in _points(tree):
        try:
            source = _SOURCE.validate_python(sources.get(channel.source) if isinstance(sources, dict) else None)
        except ValidationError:
            continue
        for quantity, model in ((Quantity.VELOCITY, Velocity), (Quantity.ACCELERATION, Acceleration)):
            try:
                band = model.model_validate(chosen.get(quantity.value, {})).band(quantity)
            except ValidationError:  # another fault, or a band that is not measured
                continue
            rate_hz = getattr(source, "rate_hz", None)
            said = band_problem(band, rate_hz) if rate_hz is not None else None
            if said:
                yield (*path, quantity.value, "band_hz"), said
