"""Counts of values in fixed buckets, filled a column at a time. Plain counts: who shows them is not known here."""

from __future__ import annotations

from bisect import bisect_left

import numpy as np
from numpy.typing import NDArray

from .columns import Times, least_of
from .tallies import Gathering, behind, exact_sum, stretches

SECONDS_NS = tuple(
    round(seconds * 1e9)
    for seconds in (0, 0.001, 0.01, 0.1, 0.5, 1, 2, 5, 10, 20, 30, 60, 120, 300, 600, 1800, 3600, 7200, 21600, 86400)
)
SORTED_EVENTS = 1024  # from so many on sorting them takes 4 ns a value, looking for each one's bucket 8 to 12
POWERS = tuple(4**exponent for exponent in range(13))


class Histogram:
    """`counts[i]` values lay above bounds[i-1] and at or below bounds[i]; the last count is for what lies beyond.

    What was added as `behind` or as `stretches` of time gathers first (`tallies.py`), and is counted when somebody
    looks.
    """

    def __init__(self, bounds: tuple[int, ...]) -> None:
        self.bounds = bounds
        self._counts = np.zeros(len(bounds) + 1, dtype=np.int64)
        self._total = 0
        self._edges = np.array(bounds, dtype=np.int64)
        self._waiting: Gathering | None = None
        self._arrivals = 0

    @property
    def counts(self) -> NDArray[np.int64]:
        """The counts, by bucket."""
        if self._waiting is not None:
            self._waiting.settle()
        return self._counts

    @property
    def total(self) -> int:
        """The sum of all values."""
        if self._waiting is not None:
            self._waiting.settle()
        return self._total

    @total.setter
    def total(self, total: int) -> None:
        self._total = total

    def add_behind(self, newest: int, times: Times) -> None:
        """Count how far each time (at least one) stands behind `newest`. Not together with `add_stretches`."""
        if least_of(times) >= newest:
            self.add_same(0, len(times))
            return
        if self._waiting is None:
            self._waiting = behind(self._add_exactly)
        self._waiting.add(newest, times)

    def add_stretches(self, times: Times) -> None:
        """Count the lengths of the stretches in which one arrival's times (at least one) do not fall."""
        if len(times) == 1:
            self.add_same(1, 1)
            return
        if self._waiting is None:
            self._waiting = stretches(self._add_exactly)
        self._arrivals += 1
        self._waiting.add(self._arrivals, times)

    def _add_exactly(self, values: NDArray[np.int64]) -> None:
        if len(values) < SORTED_EVENTS:
            self._counts += np.bincount(self._edges.searchsorted(values), minlength=len(self._counts))
        else:
            below = np.empty_like(self._counts)  # how many lie at or below each bound, and at last all
            greatest = int(values.max())
            if greatest <= 2 * len(values):  # such as lengths of stretches: 2 ns a value
                below[:-1] = np.bincount(values).cumsum()[np.minimum(self._edges, greatest)]
            else:
                below[:-1] = np.sort(values).searchsorted(self._edges, side="right")
            below[-1] = len(values)
            self._counts += below
            self._counts[1:] -= below[:-1]
        self._total += exact_sum(values)

    def add(self, values: NDArray[np.int64], times: NDArray[np.int64] | None = None) -> None:
        """Count a column, each value once or `times` times; some 11 ns a value."""
        if len(values) == 1:
            self.add_same(int(values[0]), 1 if times is None else int(times[0]))
            return
        places = self._edges.searchsorted(values)
        counted = np.bincount(places, weights=times, minlength=len(self._counts))
        self._counts += counted.astype(np.int64)
        weighed = values.astype(np.float64) if times is None else values * times.astype(np.float64)
        self._total += int(weighed.sum())

    def add_same(self, value: int, times: int) -> None:
        """Count one value several times."""
        self._counts[bisect_left(self.bounds, value)] += times
        self._total += value * times
