"""What one MQTT connection tells: plain data, so that nothing beyond the connection needs the client library."""

from dataclasses import dataclass, field


@dataclass(frozen=True, slots=True)
class Message:
    """
    A message that came in.

    Args:
        topic: it was published on.

        payload: all of it.

        qos: 0 or 1; only with 1 is there anything to acknowledge.

        retained: the broker had kept it; nobody knows since when.

        connection: number of the connection on which it came, unlike that of any other in this process.

        mid: the broker's number for it on that connection.
    """

    topic: str
    payload: bytes = field(repr=False)
    qos: int
    retained: bool
    connection: int
    mid: int


@dataclass(frozen=True, slots=True)
class Reason:
    """
    A reason code (MQTT 5.0, section 2.4).

    Args:
        code: from 128 on it is a failure.

        name: as the standard has it.
    """

    code: int
    name: str

    @property
    def failed(self) -> bool:
        """Whether it tells of a failure."""
        return self.code >= 128  # noqa: PLR2004 - section 2.4


@dataclass(frozen=True, slots=True)
class Answered:
    """
    The broker answered our CONNECT.

    Args:
        reason: whether we are in.

        session_present: the broker still has what we subscribed to, and what we have not acknowledged.
    """

    reason: Reason
    session_present: bool


@dataclass(frozen=True, slots=True)
class Ended:
    """
    The connection has ended.

    Args:
        reason: the broker's own; None where it said nothing.

        detail: what the socket last complained of; empty where it did not.
    """

    reason: Reason | None
    detail: str


@dataclass(frozen=True, slots=True)
class Subscribed:
    """
    The broker answered a subscription.

    Args:
        mid: number of the request.

        reasons: one for each of its topics.
    """

    mid: int
    reasons: tuple[Reason, ...]


@dataclass(frozen=True, slots=True)
class Published:
    """
    The broker answered a message of ours.

    Args:
        mid: number of the message.

        reason: whether it took it.
    """

    mid: int
    reason: Reason


Event = Message | Answered | Ended | Subscribed | Published
