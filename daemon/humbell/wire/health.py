"""How a link to a broker is doing."""

from dataclasses import dataclass


@dataclass(frozen=True, slots=True)
class LinkHealth:
    """
    How a link is doing.

    Args:
        ready: the broker has let us in and answered all subscriptions.

        confirmed_age_s: seconds since the last sign of life from the broker; None where there has been none.

        trouble: why it does not work, and what to do; None where it does.

        connections: that the broker has let in so far.

        failures: exceptions in callbacks so far.
    """

    ready: bool
    confirmed_age_s: float | None
    trouble: str | None
    connections: int
    failures: int
