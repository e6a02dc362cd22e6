"""The port to a broker: what an intake needs of it, and nothing that only one kind of broker has.

Protocols and plain values only. A broker never decides what becomes of a message.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, Protocol

from ..errors import StrandlineError


class BrokerLost(StrandlineError):
    """The connection is gone or was never made; the text says why and what a person can do."""


@dataclass(slots=True, eq=False)
class Message:
    """One message that is not settled yet: one arrival.

    `key` tells a repeat of it (None where the broker gives nothing of the kind); `is_numbered` says that it is the
    broker's own number and time of it, which no other message has, and not a sender's word. `place` names it for a
    person, `address` is its subject or topic in levels. `sent_ns` is the broker's clock when it took the message, ns
    since 1970 UTC. `handle` is the broker's own.
    """

    body: bytes
    place: str
    address: list[str]
    key: str | None = None
    is_numbered: bool = False
    content_type: str | None = None
    content_encoding: str | None = None
    is_repeat: bool = False  # the broker says that it has sent it before
    sent_ns: int | None = None
    handle: Any = None


class Broker(Protocol):
    """One connection's worth of a broker. Lives on one event loop; calls never overlap but for the settling ones."""

    @property
    def takes_back(self) -> bool:
        """Whether `put_back` works: the broker sends the message again later. Else it must be held until taken."""

    @property
    def remind_every_s(self) -> float | None:
        """How often the broker must hear of a message that is still worked on; None: never."""

    async def connect(self) -> str:
        """Connect; what is to be told about it, if anything. Raises BrokerLost, StrandlineError."""

    def check(self) -> None:
        """Raise BrokerLost where the connection is gone, without waiting: for times in which nothing is fetched."""

    async def fetch(self, at_most: int, bytes_at_most: int) -> list[Message]:
        """The next messages, as soon as there are some; none after a second or so. Raises BrokerLost.

        Of larger messages than `bytes_at_most` one comes at a time.
        """

    async def settle(self, message: Message) -> None:
        """It is taken for good: never send it again. Does nothing where that can no longer be said."""

    async def put_back(self, message: Message, after_s: float) -> None:
        """Send it again later. Does nothing where that can no longer be said: then it comes by itself."""

    async def remind(self, message: Message) -> None:
        """It is still worked on."""

    def holds(self, message: Message) -> bool:
        """Whether settling it would still mean something; if not, the broker sends it again anyway."""

    async def waiting(self) -> int | None:
        """Messages that the broker holds and has not sent yet; None where it cannot tell. Raises BrokerLost."""

    async def close(self) -> None:
        """Let the connection go, after what was settled has been told. A second call does nothing."""
