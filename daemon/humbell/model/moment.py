"""A moment on both clocks."""

from dataclasses import dataclass


@dataclass(frozen=True, slots=True)
class Moment:
    """
    When something happened.

    Args:
        boot: id of the computer's boot; monotonic times of different boots cannot be compared.

        mono_ns: monotonic clock, ns.

        utc_ns: UTC as the wall clock had it, ns since 1970.

        clock_known: whether the wall clock was known to be right.
    """

    boot: str
    mono_ns: int
    utc_ns: int
    clock_known: bool = True
