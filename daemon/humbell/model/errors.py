"""The errors that cross stages; what to do about each is decided in `app` alone."""


class HumbellError(Exception):
    """Base of all errors that carry a message for the user: where, what, and what to do."""


class ConfigError(HumbellError):
    """
    The configuration, or the way a command was called, cannot be used: stop before starting.

    Args:
        problems: one line for each problem, whole sentences, in the order in which a reader meets them.
    """

    def __init__(self, *problems: str) -> None:
        super().__init__("\n".join(problems))
        self.problems = problems


class InputError(HumbellError):
    """A recorded file cannot be read as what it says it is: refuse it whole."""


class OutOfReachError(HumbellError):
    """A part that is needed (a file, a device, a server) is not there just now."""


class EndOfSource(Exception):  # noqa: N818 - an end, not an error
    """All that a source has to give has been read; what never ends by itself, such as a device, never raises it."""
