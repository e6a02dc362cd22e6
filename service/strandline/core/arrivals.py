"""Which arrivals still have events in the runs: when they came, and where the journal is still needed.

Arrivals are numbered by their place in the journal, which ascends, so a column of places finds an event's arrival by
binary search. Knows nothing of time order.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from .columns import TIME_MAX, Refs


class Arrivals:
    """Columns over the arrivals that hold something: place of the first line, arrival clock, events still held."""

    def __init__(self) -> None:
        self._places = np.empty(1024, dtype=np.int64)
        self._arrived = np.empty(1024, dtype=np.int64)
        self._held = np.empty(1024, dtype=np.int64)
        self._start = self._stop = 0

    def note(self, place: int, arrived_ns: int, held: int) -> None:
        """An arrival whose lines start at `place` put this many events (at least one) into the runs."""
        if self._stop == len(self._places):
            self._make_room()
        self._places[self._stop], self._arrived[self._stop], self._held[self._stop] = place, arrived_ns, held
        self._stop += 1

    def _make_room(self) -> None:
        count = self._stop - self._start
        size = max(1024, 2 * count)
        for name in ("_places", "_arrived", "_held"):
            column = np.empty(size, dtype=np.int64)
            column[:count] = getattr(self, name)[self._start : self._stop]
            setattr(self, name, column)
        self._start, self._stop = 0, count

    def release(self, refs: Refs) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
        """Take released events off the books: arrival clocks, and how many events came at each.

        Lines that stand one behind the other in the journal came together, since records lie between arrivals: a
        search for each stretch of lines instead of each line (7 against 45 ns an event where stretches are long).
        """
        places = np.ascontiguousarray(refs["place"])
        breaks = np.flatnonzero(places[1:] != places[:-1] + refs["length"][:-1] + 1)
        starts = np.concatenate(([0], breaks + 1))
        lengths = np.diff(starts, append=len(places))
        known = self._places[self._start : self._stop]
        index = np.searchsorted(known, places[starts], side="right") - 1
        low = int(index.min())
        rows, which = np.arange(low, int(index.max()) + 1), index - low
        if len(rows) > 64 + 4 * len(index):  # few lines of arrivals far apart: leave out those between them
            rows, which = np.unique(index, return_inverse=True)
        counts = np.bincount(which, weights=lengths).astype(np.int64)
        rows += self._start
        came = self._arrived[rows]
        self._held[rows] -= counts
        while self._start < self._stop:  # by blocks, each arrival passed once
            block = self._held[self._start : min(self._start + 256, self._stop)]
            holding = np.flatnonzero(block)
            self._start += int(holding[0]) if len(holding) else len(block)
            if len(holding):
                break
        return came, counts

    def place_after(self, arrived_ns: int) -> int:
        """A place behind all lines that came up to this instant, and before those that came later."""
        part = slice(self._start, self._stop)
        later = int(self._arrived[part].searchsorted(arrived_ns, side="right"))
        return int(self._places[part][later]) if later < self._stop - self._start else TIME_MAX

    @property
    def oldest_place(self) -> int | None:
        """Place before which no line is held any more; None when nothing is held."""
        return int(self._places[self._start]) if self._stop > self._start else None

    @property
    def oldest_ns(self) -> int | None:
        """Arrival clock of the oldest arrival that still holds something."""
        return int(self._arrived[self._start]) if self._stop > self._start else None

    def columns(self) -> tuple[NDArray[np.int64], NDArray[np.int64], NDArray[np.int64]]:
        """Places, arrival clocks and held counts (for saving)."""
        part = slice(self._start, self._stop)
        return self._places[part], self._arrived[part], self._held[part]

    def restore(self, places: NDArray[np.int64], arrived: NDArray[np.int64], held: NDArray[np.int64]) -> None:
        """Take over saved columns."""
        self._places, self._arrived, self._held = places.copy(), arrived.copy(), held.copy()
        self._start, self._stop = 0, len(places)

    def check(self, held: int) -> None:
        """Assert that the counts add up to what the runs hold and places ascend."""
        places, _, counts = self.columns()
        assert np.all(places[1:] > places[:-1]) and np.all(counts >= 0) and int(counts.sum()) == held
