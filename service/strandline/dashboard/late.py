"""The late events of the last while, by source: when they came and what time they bear. Bounded; pure."""

from __future__ import annotations

from collections import deque
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from ..core.columns import Batch

EVENTS_AT_MOST = 4096  # of all sources; 80 KB


class _Came(NamedTuple):
    arrived_ns: int
    times: NDArray[np.int64]
    sources: NDArray[np.uint32]


class RecentLate:
    """A window over the late lane's batches; the newest EVENTS_AT_MOST events, whichever sources they are of."""

    def __init__(self) -> None:
        self._batches: deque[_Came] = deque()
        self._events = 0
        self._number = 0  # of the last batch that was noted

    def note(self, batch: Batch) -> None:
        """A batch has left; one of another lane, or one that leaves again, is passed over. Some 3 us."""
        if batch.lane != "late" or batch.number <= self._number:
            return
        self._number = batch.number
        times, sources = batch.times[-EVENTS_AT_MOST:].copy(), batch.refs["source"][-EVENTS_AT_MOST:].copy()
        self._batches.append(_Came(batch.instant_ns, times, sources))
        self._events += len(times)
        while self._events - len(self._batches[0].times) >= EVENTS_AT_MOST:
            self._events -= len(self._batches.popleft().times)

    def forget_before(self, arrived_ns: int) -> None:
        """Forget what came before this instant."""
        while self._batches and self._batches[0].arrived_ns < arrived_ns:
            self._events -= len(self._batches.popleft().times)

    @property
    def oldest_ns(self) -> int | None:
        """When the oldest that is remembered came; None: there is none."""
        return self._batches[0].arrived_ns if self._batches else None

    def sources(self) -> list[int]:
        """Numbers of the sources that were late, those that were so last first."""
        if not self._batches:
            return []
        numbers = np.concatenate([came.sources for came in reversed(self._batches)])
        found, first = np.unique(numbers, return_index=True)
        return [int(number) for number in found[np.argsort(first)]]

    def rows(self, wanted: list[int], at_most: int) -> dict[int, list[tuple[int, int]]]:
        """(arrived_ns, time_ns) of the last events of these sources, at most so many each, oldest first."""
        rows: dict[int, list[tuple[int, int]]] = {number: [] for number in wanted}
        if not self._batches or not wanted:
            return rows
        sources = np.concatenate([came.sources for came in self._batches])
        times = np.concatenate([came.times for came in self._batches])
        arrived = np.repeat([came.arrived_ns for came in self._batches], [len(came.times) for came in self._batches])
        for number in wanted:
            last = np.flatnonzero(sources == number)[-at_most:]
            rows[number] = list(zip(arrived[last].tolist(), times[last].tolist(), strict=True))
        return rows

    def check(self) -> None:
        """Assert that the count is right and the bound is kept (but for the rest of one batch)."""
        assert self._events == sum(len(came.times) for came in self._batches)
        assert not self._batches or self._events - len(self._batches[0].times) < EVENTS_AT_MOST
