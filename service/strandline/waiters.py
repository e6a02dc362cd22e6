"""Who waits for an answer of one feed: requests and acts, by token, until the core answers or refuses them.

Bookkeeping of futures; what is answered, and when, is the core's business.
"""

from __future__ import annotations

import asyncio
from typing import NamedTuple

from .core.effects import Outcome
from .problems import Refused

Told = asyncio.Future[Outcome | None]  # what came of a request or an act, or Refused


class _Waiter(NamedTuple):
    """Since when (arrival clock, ns), and for how many events."""

    future: Told
    since_ns: int
    events: int


class Waiters:
    """The waiters of one feed, on its loop, in order of coming."""

    def __init__(self) -> None:
        self._waiters: dict[int, _Waiter] = {}
        self._tokens = 0

    def begin(self, since_ns: int, events: int) -> tuple[int, Told]:
        """Somebody waits from now on: a token, and what will have the outcome or raise Refused."""
        self._tokens += 1
        future: Told = asyncio.get_running_loop().create_future()
        self._waiters[self._tokens] = _Waiter(future, since_ns, events)
        return self._tokens, future

    def forget(self, token: int) -> None:
        """It will not be answered."""
        self._waiters.pop(token, None)

    def answer(self, token: int, outcome: Outcome | None) -> None:
        """Answer one; nothing happens where it has gone meanwhile."""
        waiter = self._waiters.pop(token, None)
        if waiter and not waiter.future.done():
            waiter.future.set_result(outcome)

    def refuse(self, token: int, refusal: Refused) -> None:
        """Refuse one; nothing happens where it has gone meanwhile."""
        waiter = self._waiters.pop(token, None)
        if waiter and not waiter.future.done():
            waiter.future.set_exception(refusal)

    def refuse_all(self, reason: str, detail: str) -> None:
        """Refuse everybody who waits."""
        for token in list(self._waiters):
            self.refuse(token, Refused(reason, detail, 10))

    @property
    def events(self) -> int:
        """Events of all that wait."""
        return sum(waiter.events for waiter in self._waiters.values())

    @property
    def oldest_ns(self) -> int | None:
        """Since when the one waits that has waited longest."""
        return next((waiter.since_ns for waiter in self._waiters.values()), None)
