"""Rows in the order in which they came, in columns that grow as they fill.

When they are enough, and what becomes of them then, is said where they are held (`held.py`, `held_by_source.py`).
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from .columns import ROW, TIME_MAX, Refs, Times
from .runs import Strand

ROWS_FIRST = 256


class Gathered:
    """Times and refs (as ROWs) of `rows` rows; 24 bytes each, and as much again for those that may follow."""

    def __init__(self, room_at_most: int = TIME_MAX) -> None:
        """The columns take no more room ahead of the rows than so many."""
        self.rows, self._room_at_most = 0, room_at_most
        self._times, self._refs = np.empty(ROWS_FIRST, np.int64), np.empty(ROWS_FIRST, ROW)

    @property
    def room(self) -> int:
        """Rows that the columns have room for."""
        return len(self._times)

    @property
    def strand(self) -> Strand:
        """The rows, as views: they hold until the next row comes or goes."""
        return Strand(self._times[: self.rows], self._refs[: self.rows])

    def copied(self) -> Strand:
        """The rows, as a copy."""
        return Strand(self._times[: self.rows].copy(), self._refs[: self.rows].copy())

    def add(self, times: Times, refs: Refs) -> None:
        """Put rows behind those that are there."""
        stop = self.rows + len(times)
        if stop > len(self._times):
            more = max(stop, min(2 * stop, self._room_at_most)) - self.rows
            self._times = np.concatenate((self._times[: self.rows], np.empty(more, np.int64)))
            self._refs = np.concatenate((self._refs[: self.rows], np.empty(more, ROW)))
        self._times[self.rows : stop], self._refs[self.rows : stop] = times, refs
        self.rows = stop

    def keep(self, which: NDArray[np.intp]) -> None:
        """Only these rows (numbers, ascending) stay, in their order."""
        self.rows = len(which)
        self._times[: self.rows], self._refs[: self.rows] = self._times[which], self._refs[which]

    def forget(self) -> None:
        """No row is left; the columns keep their room."""
        self.rows = 0

    def check(self) -> None:
        """Assert that the columns hold what they are said to."""
        assert 0 <= self.rows <= len(self._times) == len(self._refs)
