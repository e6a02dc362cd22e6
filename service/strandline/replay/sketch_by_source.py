"""How late the events of each source are: a sketch for each, in a memory that does not grow with what is counted.

Counts in buckets as in `core/sketch.py` (DDSketch). All sources together have CELLS counts: where more are heard, each
two neighbouring buckets become one, which is the sketch of twice the relative error (Epicoco, Melle, Cafaro & Pulimeno,
"UDDSketch", 2020). So a thousand sources are told within 0.1 %, half a million within 25 %. Nothing is chosen here.
"""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from strandline.core.columns import grown
from strandline.core.sketch import GREATEST_NS, LEAST_NS, Buckets

from .basis import Int64s
from .basis_by_source import NEVER_ON_TIME

CELLS = 1 << 25  # 128 MB of counts
LEVELS = 9  # relative errors from 0.1 to 24 %, each (about) twice the one before
SOURCES_AT_MOST = 500_000
BLOCK_CELLS = 1 << 20  # looked at together


def relative_error(level: int) -> float:
    """Of a level: tanh doubles its argument where two buckets become one."""
    return math.tanh(2.0 ** (level - LEVELS - 1))


class SketchBySource:
    """Sketches by source number. Raises ValueError for more sources than fit."""

    def __init__(self, cells: int = CELLS) -> None:
        self._cells, self._level = cells, 0
        self.buckets = Buckets(relative_error(0), LEAST_NS, GREATEST_NS)
        self._counts: NDArray[np.uint32] = np.zeros((0, len(self.buckets)), dtype=np.uint32)
        self.events = self.greatest = self.never = np.zeros(0, dtype=np.int64)  # never: late with every slack

    @property
    def relative_error(self) -> float:
        """Within which a slack is found."""
        return self.buckets.relative_error

    def add(self, sources: NDArray[np.uint32], lateness_ns: Int64s) -> None:
        """Count a column of lateness, each for the source of its row. Costs 10 to 40 ns an event."""
        if not len(sources):
            return
        self.reach(int(sources.max()) + 1)
        self.events += np.bincount(sources, minlength=len(self.events))
        behind = np.flatnonzero(lateness_ns)
        numbers, values = sources[behind].astype(np.intp), lateness_ns[behind]
        never = values >= NEVER_ON_TIME
        if never.any():
            self.never += np.bincount(numbers[never], minlength=len(self.events))
            numbers, values = numbers[~never], values[~never]
        np.add.at(self._counts.reshape(-1), numbers * len(self.buckets) + self.buckets.places(values), np.uint32(1))
        np.maximum.at(self.greatest, numbers, values)

    def reach(self, count: int) -> None:
        """Have rows for so many sources."""
        if count > SOURCES_AT_MOST:
            raise ValueError(f"more than {SOURCES_AT_MOST:,} sources")
        known = len(self.events)
        if count <= known:
            return
        size = min(max(64, 2 * known, count), SOURCES_AT_MOST)
        while size * len(self.buckets) > self._cells and self._level < LEVELS - 1:
            self._fold()
        self._counts = grown(self._counts, size, 0)
        self.events, self.greatest, self.never = (
            grown(column, size, 0) for column in (self.events, self.greatest, self.never)
        )

    def _fold(self) -> None:
        """Each two neighbouring buckets become one; a bound of the wider ones is one of the narrower ones too."""
        self._level += 1
        wider = Buckets(relative_error(self._level), LEAST_NS, GREATEST_NS)
        # By the middle of each, in the exponents: the bounds are rounded to whole ns.
        places = wider.places(np.maximum(self.buckets.values, 0).astype(np.int64))
        begins = np.flatnonzero(np.concatenate(([True], places[1:] != places[:-1])))
        counts = np.zeros((len(self._counts), len(wider)), dtype=np.uint32)
        if len(counts):
            counts[:, places[begins]] = np.add.reduceat(self._counts, begins, axis=1)
        self.buckets, self._counts = wider, counts

    def slacks_for(self, late_share: float) -> Int64s:
        """By source the slack that keeps this late share of what is to come, at most a bucket longer than the least.

        With k of n events above it the next one is above it with probability (k + 1) / (n + 1), whatever the lateness
        (exchangeable events, ties apart), so k is the greatest that keeps that within the share: for few events a share
        of those that were seen would promise too much, and for many sources the sum of it shows. Where even the
        greatest lateness does not keep it (too much came behind a silence), that.
        """
        found = np.zeros(len(self.events), dtype=np.int64)
        step = max(1, BLOCK_CELLS // len(self.buckets))
        for begin in range(0, len(found), step):
            part = slice(begin, begin + step)
            allowed = np.floor(late_share * (self.events[part] + 1)) - 1 - self.never[part]
            allowed = np.maximum(allowed, 0)
            counts = self._counts[part]
            from_here = np.cumsum(counts[:, ::-1], axis=1, dtype=np.int64)[:, ::-1]
            places = np.argmax(from_here - counts <= allowed[:, None], axis=1)
            needed = np.minimum(self.buckets.upper[places], self.greatest[part])
            found[part] = np.where(from_here[:, 0] <= allowed, 0, needed)
        return found

    def late(self, slacks_ns: Int64s | int) -> Int64s:
        """By source at most how many of its events are later than its slack."""
        slacks = np.broadcast_to(np.asarray(slacks_ns, dtype=np.int64), self.events.shape)
        places = self.buckets.places(slacks)
        exact = (slacks == self.buckets.upper[places]) | (slacks >= self.greatest)
        found = np.zeros(len(self.events), dtype=np.int64)
        step = max(1, BLOCK_CELLS // len(self.buckets))
        columns = np.arange(len(self.buckets))
        for begin in range(0, len(found), step):
            part = slice(begin, begin + step)
            counted = columns >= (places[part] + exact[part])[:, None]
            found[part] = np.where(counted, self._counts[part], 0).sum(axis=1, dtype=np.int64)
        return found + self.never

    def of_all(self) -> NDArray[np.int64]:
        """The counts of all sources together, by bucket."""
        found: Int64s = self._counts.sum(axis=0, dtype=np.int64)
        return found

    def check(self) -> None:
        """Assert that the counts add up."""
        assert np.all(self._counts.sum(axis=1, dtype=np.int64) + self.never <= self.events)
