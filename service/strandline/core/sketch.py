"""A sketch of how late events are: counts in buckets of equal relative width, in bounded memory, filled by columns.

Method: DDSketch (Masson, Rim & Lee, VLDB 2019): gamma = (1 + accuracy) / (1 - accuracy), value x falls into bucket
ceil(log_gamma x) and is estimated as 2 gamma^i / (gamma + 1), which is within `accuracy` of x. Zeros have a bucket
of their own. Here values are ns from 1 us to about 1 year; what lies outside counts in the end buckets. Pure.
"""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

ACCURACY = 0.01
LEAST_NS = 1_000
GREATEST_NS = 366 * 86_400 * 1_000_000_000


class Sketch:
    """Counts by lateness. `counts[0]` is for 0 (and below LEAST_NS), the rest ascend."""

    def __init__(self, accuracy: float = ACCURACY) -> None:
        self.gamma = (1 + accuracy) / (1 - accuracy)
        self._log_gamma = math.log(self.gamma)
        self._first = self._index(LEAST_NS)
        buckets = self._index(GREATEST_NS) - self._first + 1
        self.counts: NDArray[np.float64] = np.zeros(buckets + 1)  # float: counts fade by halving
        exponents = np.arange(self._first, self._first + buckets)
        estimates = 2 * np.exp(exponents * self._log_gamma) / (self.gamma + 1)
        self.values: NDArray[np.float64] = np.concatenate(([0.0], estimates))  # ns
        # The upper edge of each bucket as a whole number: a value belongs to the first bucket whose edge reaches it.
        self._edges = np.floor(np.exp(exponents * self._log_gamma)).astype(np.int64)
        self.total = 0.0

    def _index(self, value: float) -> int:
        return math.ceil(math.log(value) / self._log_gamma)

    def add(self, lateness_ns: NDArray[np.int64]) -> None:
        """Count a column of values at or above 0."""
        late = lateness_ns[lateness_ns >= LEAST_NS]
        self.add_zeros(len(lateness_ns) - len(late))
        if len(late):
            places = np.minimum(np.searchsorted(self._edges, late) + 1, len(self.counts) - 1)
            self.counts += np.bincount(places, minlength=len(self.counts))
            self.total += len(late)

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

    def excess(self, value_ns: float) -> float:
        """Mean of what lies above a value, minus the value: the scale of the tail there. 0 if nothing does."""
        place = int(np.searchsorted(self.values, value_ns, side="right"))
        above = float(self.counts[place:].sum())
        if not above:
            return 0.0
        return float((self.counts[place:] * (self.values[place:] - value_ns)).sum() / above)
