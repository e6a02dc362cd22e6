"""Handing messages over to the feed: each an arrival of its own, or as a whole to quarantine where it can be none.

Whether a message is durable is told later, and what is said to the broker of it then is `taking`. Order, lateness and
refusals are the core's.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from typing import NamedTuple

from ..errors import BodyError, TooManyFaults
from ..problems import Refused
from ..runtime import FeedRuntime
from ..waiters import Told
from .broker import Message
from .counts import Counts
from .reading import Read, Reader, key_in_quarantine

# A portion holds the loop up for some 8 ms: 130 us a message of 50 events (8 kB), 450 us one of 500 (80 kB).
PORTION_MESSAGES, PORTION_BYTES = 64, 1 << 20


class Handed(NamedTuple):
    """A message that is with the feed: what is told of it once it is durable, or Refused."""

    told: Told
    outcome: str = "taken"
    detail: str = ""  # why it is in quarantine


Begun = Handed | Exception | None  # a message that was handed over; why it could not be; nothing was done yet


class Handing:
    """Hands the messages of one intake over."""

    def __init__(self, reader: Reader, runtime: FeedRuntime, counts: Counts) -> None:
        self._reader, self._runtime, self._counts = reader, runtime, counts

    def read(self, portion: Sequence[Message]) -> Sequence[Read | None]:
        """The arrivals of a portion in one go, for `over`; None for a message that wants a look of its own."""
        return self._reader.together(portion)

    async def over(self, message: Message, read: Read | None = None, *, more: bool = False) -> Handed:
        """Hand it over; `more`: others follow at once, and then the runtime's `mark`. Raises Refused."""
        try:
            # Nothing awaits between reading and the core: the numbers of new sources are still right. What was read
            # before has none.
            arrival, key = read or await self._reader.arrival(message)
            if message.sent_ns is not None:
                self._counts.delays.note((self._runtime.clock.now_ns() - message.sent_ns) / 1e9)
            told = self._runtime.begin(arrival, key, more=more)
            detail = _reused(told)
            if detail is None:
                return Handed(told)
        except (BodyError, TooManyFaults) as error:
            detail = str(error)
        kept = self._reader.refused(message, detail)
        return Handed(self._runtime.begin(kept, key_in_quarantine(message), more=more), "quarantined", detail)


def _reused(told: Told) -> str | None:
    """Why the feed will never take a message, where its key came with another body; that is told at once."""
    error = told.exception() if told.done() else None
    return str(error) if isinstance(error, Refused) and error.reason == "key_reused" else None


def portions(messages: Sequence[Message]) -> Iterator[Sequence[Message]]:
    """The messages in order, so many at a time as the loop can bear; a larger one by itself."""
    start = size = 0
    for place, message in enumerate(messages):
        if place > start and (place - start == PORTION_MESSAGES or size + len(message.body) > PORTION_BYTES):
            yield messages[start:place]
            start, size = place, 0
        size += len(message.body)
    if messages:
        yield messages[start:]


async def is_in_the_feed(begun: Begun) -> bool:
    """Whether a message is in the feed for good, once that is known."""
    if not isinstance(begun, Handed):
        return False
    try:
        await begun.told
    except Refused:
        return False
    return True


def forget(begun: Sequence[Begun]) -> None:
    """Nobody waits for these any more: asyncio shall not report them as forgotten."""
    for each in begun:
        if isinstance(each, Handed) and not each.told.cancel() and not each.told.cancelled():
            each.told.exception()
