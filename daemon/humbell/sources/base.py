"""The contract of every source of samples."""

from typing import Protocol

from humbell.model import Block, EndOfSource

__all__ = ["EndOfSource", "Source"]


class Source(Protocol):
    """
    Delivers blocks, oldest first, one at a time.

    A source hands over what it got, as it got it: it neither fills gaps nor repeats samples. Sequence numbers and start
    times tell `Continuity` what joins up. A source that loses samples counts them into the next block's *seq* or
    *start_ns*, so that the loss shows.
    """

    @property
    def name(self) -> str:
        """The source's id."""
        ...

    def open(self) -> None:
        """
        Get ready to read.

        Raises:
            ConfigError: what is asked for cannot be.

            InputError: a file is not what it says it is.

            OutOfReachError: a device or server is away; trying again later may help.
        """
        ...

    def read(self, timeout_s: float) -> Block | None:
        """
        Return the next block, or None where none came within *timeout_s*.

        Raises:
            EndOfSource: there is no more.

            OutOfReachError: the source was lost; it wants to be closed and opened again.
        """
        ...

    def close(self) -> None:
        """Let go of files, devices and connections. May be called twice."""
        ...
