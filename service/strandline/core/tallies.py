"""Columns that wait to be counted: a few arrivals' rows are counted together, since numpy's calls cost as much as rows.

A count is the same whenever it is made, so nothing that is decided or shown depends on when that is: whoever looks at a
count has it made first. The lateness of 50 events took 22 us to count in its two histograms, one by one; gathered 6.
What is counted, and what for, is said by whoever asks.
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray

from .columns import TIME_MAX, Times, distances, least_of

ROWS = 4096  # counted together at most; 16 bytes each


class Gathering:
    """Times and a number beside each; `count(beside, times)` is called with what has gathered.

    Many rows of one arrival are counted at once: then there is one number beside all of them.
    """

    def __init__(self, count: Callable[[NDArray[np.int64] | int, Times], None]) -> None:
        self._count = count
        self._rows = 0
        self._beside, self._times = np.empty(ROWS, np.int64), np.empty(ROWS, np.int64)

    def add(self, beside: int, times: Times) -> None:
        """Rows with the same number beside each. They are copied, so that no record is kept for them."""
        start, stop = self._rows, self._rows + len(times)
        if stop > ROWS:
            self.settle()
            start, stop = 0, len(times)
            if stop > ROWS // 2:
                self._count(beside, times)
                return
        self._times[start:stop], self._beside[start:stop] = times, beside
        self._rows = stop

    def settle(self) -> None:
        """Count what waits."""
        rows, self._rows = self._rows, 0
        if rows:
            self._count(self._beside[:rows], self._times[:rows])


def behind(count: Callable[[Times], None]) -> Gathering:
    """Counts how far times stand behind the number beside each, as `distances` has it."""

    def lateness(newest: NDArray[np.int64] | int, times: Times) -> None:
        if isinstance(newest, int) and newest - least_of(times) <= TIME_MAX:  # two steps, where `distances` takes six
            count(newest - np.minimum(times, newest))
        else:
            count(distances(newest, times))

    return Gathering(lateness)


def stretches(count: Callable[[NDArray[np.int64]], None]) -> Gathering:
    """Counts the lengths of stretches in which times do not fall; a new one begins where the number beside changes."""

    def lengths(beside: NDArray[np.int64] | int, times: Times) -> None:
        falls = times[1:] < times[:-1]
        if not isinstance(beside, int):
            falls |= beside[1:] != beside[:-1]
        ends = falls.nonzero()[0]
        edges = np.empty(len(ends) + 2, dtype=np.int64)
        edges[0], edges[1:-1], edges[-1] = -1, ends, len(times) - 1
        count(edges[1:] - edges[:-1])  # np.diff, prepending and appending: 29 us, this 1

    return Gathering(lengths)


def exact_sum(values: NDArray[np.int64]) -> int:
    """The sum of a column of fewer than 2^31 values at or above 0, whatever they are: as floats it would depend on what
    was added together, and int64 may overflow.
    """
    if not len(values) or int(values.max()) <= TIME_MAX // len(values):
        return int(values.sum())
    return (int((values >> 32).sum()) << 32) + int((values & 0xFFFFFFFF).sum())
