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

        Places are sorted, and each arrival's begin is looked for among them: 4 to 5 ns an event, where looking for each
        line's arrival takes 25 to 42. In an ordered feed they are sorted already: to see that takes 0.4.
        """
        places = refs["place"].copy()
        if (places[1:] < places[:-1]).any():
            places.sort()
        known = self._places[self._start : self._stop]
        low = int(known.searchsorted(places[0], side="right")) - 1
        high = int(known.searchsorted(places[-1], side="right"))
        rows: NDArray[np.intp] | slice
        if high - low > 64 + 4 * len(places):  # few lines of arrivals far apart: leave out those between them
            rows, counts = np.unique(known.searchsorted(places, side="right") - 1, return_counts=True)
            rows += self._start
        else:
            rows, counts = slice(self._start + low, self._start + high), np.empty(high - low, dtype=np.int64)
            counts[:-1], counts[-1] = places.searchsorted(known[low + 1 : high]), len(places)
            counts[1:] -= counts[:-1].copy()
        came = self._arrived[rows].copy()
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
