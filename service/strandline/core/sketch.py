"""A sketch of how late events are: counts in buckets of equal relative width, in bounded memory, filled by columns.

Method: DDSketch (Masson, Rim & Lee, VLDB 2019): gamma = (1 + accuracy) / (1 - accuracy), value x falls into bucket
ceil(log_gamma x) and is estimated as 2 gamma^i / (gamma + 1), which is within `accuracy` of x. Zeros have a bucket
of their own. Here values are ns from 1 us to about 1 year; what lies outside counts in the end buckets. Pure.
"""

from __future__ import annotations

import math
from bisect import bisect_left

import numpy as np
from numpy.typing import NDArray

ACCURACY = 0.01
LEAST_NS = 1_000
GREATEST_NS = 366 * 86_400 * 1_000_000_000


class Buckets:
    """The buckets of one accuracy: place 0 is for 0 (and below LEAST_NS), the rest ascend. Shared, never changed."""

    def __init__(self, accuracy: float) -> None:
        self.gamma = (1 + accuracy) / (1 - accuracy)
        log_gamma = math.log(self.gamma)
        first = math.ceil(math.log(LEAST_NS) / log_gamma)
        buckets = math.ceil(math.log(GREATEST_NS) / log_gamma) - first + 1
        exponents = np.arange(first, first + buckets)
        estimates = 2 * np.exp(exponents * log_gamma) / (self.gamma + 1)
        self.values: NDArray[np.float64] = np.concatenate(([0.0], estimates))  # ns
        # The upper edge of each bucket as a whole number: a value belongs to the first bucket whose edge reaches it.
        edges = np.floor(np.exp(exponents * log_gamma)).astype(np.int64)
        self.upper: NDArray[np.int64] = np.concatenate(([LEAST_NS - 1], edges))
        self._uppers: list[int] = self.upper[:-1].tolist()  # without the last: what lies beyond counts there
        # Cells: the exponent of a float64 and its first bits, narrower than a bucket, so that at most one edge lies in
        # each: a look into a table and one comparison find the place, at 4 ns a value (searchsorted: 27 ns).
        bits = math.ceil(-math.log2(1 - 1 / self.gamma)) + 1
        self._shift, self._base = 52 - bits, 1023 << bits
        cells = 2.0 ** np.arange(64)[:, None] * (1 + np.arange(2**bits) / 2**bits)
        lowest = np.minimum(np.ceil(cells.ravel()), 2.0**63 - 1024).astype(np.int64)
        self._cells = np.minimum(np.searchsorted(self.upper, lowest), len(self.upper) - 1)

    def __len__(self) -> int:
        return len(self.upper)

    def place(self, value: int) -> int:
        """The place of one value."""
        return bisect_left(self._uppers, value)

    def places(self, values: NDArray[np.int64]) -> NDArray[np.int64]:
        """The place of each value; they are at or above 0."""
        cells = np.maximum(values, 1).astype(np.float64).view(np.int64)
        cells >>= self._shift
        cells -= self._base
        places: NDArray[np.int64] = self._cells.take(cells)
        places += values > self.upper.take(places)
        np.minimum(places, len(self.upper) - 1, out=places)
        return places


_BUCKETS: dict[float, Buckets] = {ACCURACY: Buckets(ACCURACY)}


class Sketch:
    """Counts by lateness. `counts[0]` is for 0 (and below LEAST_NS), the rest ascend."""

    def __init__(self, accuracy: float = ACCURACY) -> None:
        self.accuracy = accuracy
        self.buckets = _BUCKETS.get(accuracy) or Buckets(accuracy)
        self.gamma, self.values = self.buckets.gamma, self.buckets.values
        self.counts: NDArray[np.float64] = np.zeros(len(self.buckets))  # float: counts fade by halving
        self.total = 0.0

    def add(self, lateness_ns: NDArray[np.int64]) -> None:
        """Count a column of values at or above 0."""
        if len(lateness_ns) == 1:
            self.add_one(int(lateness_ns[0]))
            return
        self.counts += np.bincount(self.buckets.places(lateness_ns), minlength=len(self.counts))
        self.total += len(lateness_ns)

    def add_one(self, lateness_ns: int) -> None:
        """Count one value: 0.4 us, where a column costs 6 us however short it is."""
        self.counts[self.buckets.place(lateness_ns)] += 1
        self.total += 1

    def add_zeros(self, count: int) -> None:
        """Count events that are not late at all."""
        self.counts[0] += count
        self.total += count

    def fade(self) -> None:
        """Let everything counted so far weigh half."""
        self.counts *= 0.5
        self.total = float(self.counts.sum())

    def quantile(self, share: float) -> float:
        """The value, ns, that this share of all lies at or below; within the accuracy. 0 while empty."""
        if not self.total:
            return 0.0
        place = int(np.searchsorted(np.cumsum(self.counts), share * self.total))
        return float(self.values[min(place, len(self.values) - 1)])

    def share_above(self, value_ns: float) -> float:
        """The share of all that lies above a value; exact at a bucket's edge, else off by at most that bucket."""
        if not self.total:
            return 0.0
        place = int(np.searchsorted(self.values, value_ns, side="right"))
        return float(self.counts[place:].sum() / self.total)

    def bounds_above(self, value_ns: int) -> tuple[float, float]:
        """Two bounds on the share of all that lies above a value; equal where the value is the edge of a bucket."""
        if not self.total:
            return 0.0, 0.0
        place = self.buckets.place(value_ns)
        above = float(self.counts[place + 1 :].sum())
        at_edge = value_ns == self.buckets.upper[place]
        within = 0.0 if at_edge else float(self.counts[place])
        return min(above / self.total, 1.0), min((above + within) / self.total, 1.0)

    def excess(self, value_ns: float) -> float:
        """Mean of what lies above a value, minus the value: the scale of the tail there. 0 if nothing does."""
        place = int(np.searchsorted(self.values, value_ns, side="right"))
        above = float(self.counts[place:].sum())
        if not above:
            return 0.0
        return float((self.counts[place:] * (self.values[place:] - value_ns)).sum() / above)
