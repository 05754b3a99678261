"""What can go wrong on a link to a broker."""

from humbell.model import HumbellError
from humbell.wire.trouble import Trouble


class RefusedError(HumbellError):
    """The broker will not take a message, now or later: do not send it again."""


class NoRoomError(Exception):
    """
    Raised by what takes messages: this one finds no room.

    It is offered again, and nothing is read meanwhile; when no room comes, the connection is given up.
    """


class LostError(Exception):
    """
    A connection has ended, or was given up.

    Args:
        why: and what to do about it.
    """

    def __init__(self, why: Trouble) -> None:
        super().__init__(why.text)
        self.why = why


class CallbackError(Exception):
    """
    A callback raised an exception, so that nobody knows how far its work got.

    Args:
        where: its name.

        error: what it raised.
    """

    def __init__(self, where: str, error: Exception) -> None:
        super().__init__(f"{where}: {type(error).__name__}: {error}")
        self.where = where
        self.error = error
