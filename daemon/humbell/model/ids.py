"""Ids of sites, nodes, machines, points and sources: the stable keys of all that is stored."""

from dataclasses import dataclass
from typing import Annotated

from pydantic import StringConstraints

# Lower case, so that ids are safe in MQTT topics, file names and addresses alike. 64 is longer than any tag on a plant.
Id = Annotated[str, StringConstraints(pattern=r"^[a-z0-9]([a-z0-9._-]{0,62}[a-z0-9])?$")]


@dataclass(frozen=True, slots=True, order=True)
class PointId:
    """
    Names one sensor position and direction on one machine.

    Args:
        machine: id of the machine.

        point: id of the point on it.
    """

    machine: str
    point: str

    def __str__(self) -> str:
        """Return ``machine/point``."""
        return f"{self.machine}/{self.point}"


@dataclass(frozen=True, slots=True, order=True)
class ChannelId:
    """
    Names one signal of one source.

    Args:
        source: id of the source.

        index: channel number, from 0.
    """

    source: str
    index: int

    def __str__(self) -> str:
        """Return ``source/index``."""
        return f"{self.source}/{self.index}"

    @classmethod
    def parse(cls, text: str) -> "ChannelId":
        """
        Read ``source/index``.

        Raises:
            ValueError: *text* has another form.
        """
        source, slash, index = text.rpartition("/")
        if not (slash and source and index.isascii() and index.isdigit()):
            raise ValueError(f"{text!r} is no channel (give SOURCE/NUMBER, such as daq-a/0; numbers start at 0)")
        return cls(source, int(index))
