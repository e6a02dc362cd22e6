"""Counts of values in fixed buckets, filled a column at a time. Plain counts: who shows them is not known here."""

from __future__ import annotations

from bisect import bisect_left

import numpy as np
from numpy.typing import NDArray

SECONDS_NS = tuple(
    round(seconds * 1e9)
    for seconds in (0, 0.001, 0.01, 0.1, 0.5, 1, 2, 5, 10, 20, 30, 60, 120, 300, 600, 1800, 3600, 7200, 21600, 86400)
)
POWERS = tuple(4**exponent for exponent in range(13))


class Histogram:
    """`counts[i]` values lay above bounds[i-1] and at or below bounds[i]; the last count is for what lies beyond."""

    def __init__(self, bounds: tuple[int, ...]) -> None:
        self.bounds = bounds
        self.counts = np.zeros(len(bounds) + 1, dtype=np.int64)
        self.total = 0
        self._edges = np.array(bounds, dtype=np.int64)

    def add(self, values: NDArray[np.int64], times: NDArray[np.int64] | None = None) -> None:
        """Count a column, each value once or `times` times; some 11 ns a value."""
        if len(values) == 1:
            self.add_same(int(values[0]), 1 if times is None else int(times[0]))
            return
        places = np.searchsorted(self._edges, values)
        counted = np.bincount(places, weights=times, minlength=len(self.counts))
        self.counts += counted.astype(np.int64)
        weighed = values.astype(np.float64) if times is None else values * times.astype(np.float64)
        self.total += int(weighed.sum())

    def add_same(self, value: int, times: int) -> None:
        """Count one value several times."""
        self.counts[bisect_left(self.bounds, value)] += times
        self.total += value * times
