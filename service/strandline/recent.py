"""The ordered batches of the last while, for those who listen to a feed's output. Bounded; reads nothing.

What is older is in the sinks: a listener that asks for it is told so, and none ever holds the feed up.
"""

from __future__ import annotations

import asyncio
from collections import deque
from itertools import pairwise

from .bell import Bell
from .core.columns import Batch

EVENTS_AT_MOST = 500_000


class Recent:
    """A window over a feed's ordered batches, and a bell for those who wait for the next one."""

    def __init__(self) -> None:
        self._batches: deque[tuple[Batch, int]] = deque()
        self._events = 0
        self._gone = 0  # batches up to this number are in the window no more
        self._bell = Bell()
        self.reached = 0  # number of the last batch that has left
        self.closed = False

    def begin(self, number: int) -> None:
        """Batches up to this number left before the window was there."""
        self.reached = self._gone = number

    def add(self, batch: Batch) -> None:
        """A batch has left."""
        if not self._batches:
            self._gone = batch.number - 1
        self._batches.append((batch, int(batch.refs["place"].min())))
        self._events += len(batch)
        self.reached = max(self.reached, batch.number)
        while self._events > EVENTS_AT_MOST and len(self._batches) > 1:
            self._forget_oldest()
        self._bell.ring()

    def forget_before(self, place: int) -> None:
        """The journal no longer holds what lies before this place; batches that need it go, and all before them."""
        keep = len(self._batches)
        while keep and self._batches[keep - 1][1] >= place:
            keep -= 1
        for _ in range(keep):
            self._forget_oldest()

    def _forget_oldest(self) -> None:
        batch, _ = self._batches.popleft()
        self._events -= len(batch)
        self._gone = batch.number

    def holds_all_after(self, number: int) -> bool:
        """Whether no batch with a higher number has gone from the window."""
        return number >= self._gone

    def after(self, number: int) -> list[Batch]:
        """Batches with a higher number, oldest first."""
        return [batch for batch, _ in self._batches if batch.number > number]

    @property
    def first_number(self) -> int:
        """Number of the oldest batch in the window, or that the next one can have."""
        return self._gone + 1

    def close(self) -> None:
        """Let everyone who waits go home."""
        self.closed = True
        self._bell.ring()

    def bell(self) -> asyncio.Event:
        """Set when the next batch has come. Take it before looking, wait on it after."""
        return self._bell.next

    def check(self) -> None:
        """Assert that numbers ascend from what is gone to what was reached, and that the count is right."""
        numbers = [self._gone, *(batch.number for batch, _ in self._batches)]
        assert all(first < later for first, later in pairwise(numbers))
        assert numbers[-1] <= self.reached
        assert self._events == sum(len(batch) for batch, _ in self._batches)
