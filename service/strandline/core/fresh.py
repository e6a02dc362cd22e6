"""Rows as they came: those of large arrivals in columns of their own, small ones gathered.

Nothing is sorted and nothing is let go here but all at once; what becomes of the rows is said in `near.py`, `held.py`.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from .columns import ROW, TIME_MAX, Refs, Times, greatest_of, least_of
from .gathered import Gathered
from .runs import Strand, joined

# From so many rows on an arrival keeps columns of its own (some 500 bytes); fewer are gathered in columns that have
# room for so many (98 kB).
PART_EVENTS = 4096


class Fresh:
    """Rows in order of arrival. `least` is TIME_MAX and `greatest` of no meaning without rows."""

    def __init__(self) -> None:
        self.rows, self.least, self.greatest = 0, TIME_MAX, 0
        self._parts: list[Strand] = []
        self._small = Gathered(PART_EVENTS)

    def add(self, times: Times, refs: Refs) -> None:
        """Put rows (at least one) behind those that are there. Times are copied, refs are not to change any more."""
        rows = len(times)
        if rows >= PART_EVENTS:
            self.put(times.copy(), refs)
            return
        if self._small.rows + rows > PART_EVENTS:
            self._part()
        self._small.add(times, refs)
        self._note(times)

    def put(self, times: Times, refs: Refs) -> None:
        """The same without copying."""
        if len(times) < PART_EVENTS:
            self.add(times, refs)
            return
        self._part()
        self._parts.append(Strand(times, refs))
        self._note(times)

    def _note(self, times: Times) -> None:
        greatest = greatest_of(times)
        self.greatest = max(self.greatest, greatest) if self.rows else greatest
        self.least = min(self.least, least_of(times))
        self.rows += len(times)

    def _part(self) -> None:
        """What is gathered becomes columns of its own."""
        if self._small.rows:
            self._parts.append(self._small.copied())
            self._small.forget()

    def copied(self) -> Strand:
        """The rows; what becomes of them later does not change it."""
        parts = [*self._parts, self._small.copied()] if self._small.rows else self._parts
        return joined(parts) if parts else Strand(np.empty(0, np.int64), np.empty(0, ROW))

    def take(self, older: Sequence[Strand] = ()) -> Strand:
        """Rows of others that are older, and behind them all rows; none is left."""
        parts = [*older, *self._parts]
        if parts and self._small.rows:
            parts.append(self._small.strand)  # joining copies it
        taken = joined(parts) if parts else self._small.copied()
        self._parts = []
        self._small.forget()
        self.rows, self.least = 0, TIME_MAX
        return taken

    def check(self) -> None:
        """Assert that rows and bounds are what they are said to be."""
        self._small.check()
        times, refs = self.copied()
        assert len(times) == len(refs) == self.rows
        assert self.least == min(times.tolist(), default=TIME_MAX)
        assert not self.rows or self.greatest == int(times.max())
