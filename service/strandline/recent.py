"""The ordered batches of the last while, for those who listen to a feed's output. Bounded; reads nothing.

What is older is in the sinks: a listener that asks for it is told so, and none ever holds the feed up.
"""

from __future__ import annotations

import asyncio
from collections import deque

from .core.columns import Batch

EVENTS_AT_MOST = 500_000


class Recent:
    """A window over a feed's ordered batches, and a bell for those who wait for the next one."""

    def __init__(self) -> None:
        self._batches: deque[tuple[Batch, int]] = deque()
        self._events = 0
        self._bell = asyncio.Event()
        self.closed = False

    def add(self, batch: Batch) -> None:
        """A batch has left."""
        self._batches.append((batch, int(batch.refs["place"].min())))
        self._events += len(batch)
        while self._events > EVENTS_AT_MOST and len(self._batches) > 1:
            self._events -= len(self._batches.popleft()[0])
        self._ring()

    def forget_before(self, place: int) -> None:
        """The journal no longer holds what lies before this place; batches that need it go, and all before them."""
        keep = len(self._batches)
        while keep and self._batches[keep - 1][1] >= place:
            keep -= 1
        for _ in range(keep):
            self._events -= len(self._batches.popleft()[0])

    def after(self, number: int) -> list[Batch]:
        """Batches with a higher number, oldest first."""
        return [batch for batch, _ in self._batches if batch.number > number]

    @property
    def first_number(self) -> int | None:
        """Number of the oldest batch in the window."""
        return self._batches[0][0].number if self._batches else None

    def close(self) -> None:
        """Let everyone who waits go home."""
        self.closed = True
        self._ring()

    def _ring(self) -> None:
        bell, self._bell = self._bell, asyncio.Event()
        bell.set()

    def bell(self) -> asyncio.Event:
        """Set when the next batch has come. Take it before looking, wait on it after."""
        return self._bell
