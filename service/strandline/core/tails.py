"""How late each source's events have been: a few counts a source, from which a steered slack learns what its tail is.

Lateness is remembered in buckets of 25 %: enough to find a tail's scale, for eta may be off by half (1 % as for a whole
feed would take 6 KB a source). Columns by source number; an arrival costs what its events do. How many events are
remembered of a source, and what becomes of what is found, is `slack_by_source.py`.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from .columns import Times, grown
from .sketch import buckets_of

RELATIVE_ERROR = 0.25
LEAST_NS, GREATEST_NS = 1_000_000, 86_400 * 1_000_000_000  # the least tail, and a day
TAIL_LEAST_NS = 1_000_000.0
WAITING_ROWS = 2_048
SHOWN_EVENTS = 8  # so many late events show a tail
SHOWN_SHARE = 0.25  # beyond it there is no tail to speak of

Numbers = NDArray[np.intp]
Floats = NDArray[np.float64]


class Tails:
    """Counts of lateness by source and bucket, all but the least bucket, and the greatest lateness of each source."""

    def __init__(self) -> None:
        self._buckets = buckets_of(RELATIVE_ERROR, LEAST_NS, GREATEST_NS)
        self._edges = self._buckets.upper.astype(np.float64)
        self.greatest: NDArray[np.int64] = np.empty(0, dtype=np.int64)
        self.counts: NDArray[np.float32] = np.empty((0, len(self._buckets) - 1), dtype=np.float32)
        self._waiting: list[tuple[Numbers, Times]] = []
        self._waiting_rows = 0

    def reach(self, size: int) -> None:
        """Have rows for so many sources, more than before."""
        self.settle()
        self.greatest, self.counts = grown(self.greatest, size, 0), grown(self.counts, size, 0)

    def add(self, numbers: Numbers, lateness_ns: Times) -> None:
        """Count a column of lateness (at least 0), each for the source of its row; neither column changes later.

        Short ones wait, for all of them together cost little more than one does.
        """
        behind = lateness_ns.nonzero()[0]
        if not len(behind):
            return
        if len(behind) < len(numbers):
            numbers, lateness_ns = numbers[behind], lateness_ns[behind]
        self._waiting.append((numbers, lateness_ns))
        self._waiting_rows += len(numbers)
        if self._waiting_rows >= WAITING_ROWS:
            self.settle()

    def settle(self) -> None:
        """Count what waits: before anybody looks at the counts."""
        if self._waiting:
            numbers = np.concatenate([each for each, _ in self._waiting])
            lateness_ns = np.concatenate([each for _, each in self._waiting])
            self._waiting, self._waiting_rows = [], 0
            self._count(numbers, lateness_ns)

    def _count(self, numbers: Numbers, lateness_ns: Times) -> None:
        places = self._buckets.places(lateness_ns)
        behind = np.flatnonzero(places)
        if not len(behind):
            return
        if len(behind) < len(places):
            numbers, places, lateness_ns = numbers[behind], places[behind], lateness_ns[behind]
        spots = numbers * self.counts.shape[1]
        spots += places
        spots -= 1
        np.add.at(self.counts.reshape(-1), spots, np.float32(1))
        np.maximum.at(self.greatest, numbers, lateness_ns)

    def add_one(self, number: int, lateness_ns: int) -> None:
        """Count one event."""
        place = self._buckets.place(lateness_ns)
        if place:
            self.counts[number, place - 1] += 1
            self.greatest[number] = max(int(self.greatest[number]), lateness_ns)

    def fade(self, numbers: Numbers) -> None:
        """Let everything counted of these sources weigh half."""
        self.settle()
        self.counts[numbers] *= np.float32(0.5)

    def tails(self, numbers: Numbers, weight: Floats, target: float) -> tuple[Floats, Floats]:
        """The scale of each source's tail, and the slack for which the target's share is late; ns. `weight`: events.

        The tail is what lies beyond the target's quantile, or beyond what a few late events show, and is carried on as
        an exponential one, as `SteeredSlack` has it. Events are taken to lie evenly within a bucket, whose topmost ends
        at the greatest.
        """
        self.settle()
        counts = self.counts[numbers].astype(np.float64)
        share = np.minimum(np.maximum(target, SHOWN_EVENTS / weight), SHOWN_SHARE)
        wanted = share * weight  # events beyond the edge of the tail
        lower, upper = self._bounds(numbers)
        from_top = np.cumsum(counts[:, ::-1], axis=1)[:, ::-1]
        moments = np.cumsum((counts * (lower + upper) / 2)[:, ::-1], axis=1)[:, ::-1]
        rows = np.arange(len(numbers))
        place = np.count_nonzero(from_top >= wanted[:, None], axis=1) - 1
        within = place >= 0  # else fewer came behind at all, and all of those are the tail
        place = np.maximum(place, 0)
        inside, low, up = counts[rows, place], lower[place], upper[rows, place]
        part = np.where(within, (wanted - (from_top[rows, place] - inside)) / np.maximum(inside, 1e-9), 0.0)
        edge = np.where(within, up - part * (up - low), 0.0)
        beyond = moments[rows, place] - inside * (low + up) / 2 + part * inside * (edge + up) / 2
        mean = np.where(within, beyond / wanted, moments[:, 0] / np.maximum(from_top[:, 0], 1e-9))
        scale = np.maximum(np.maximum(mean - edge, 1e-3 * edge), TAIL_LEAST_NS)
        return scale, edge + scale * np.log(share / np.minimum(target, share))

    def late_share(self, numbers: Numbers, weight: Floats, slack_ns: int) -> Floats:
        """About the share of each source's events that is later than a slack. `weight`: events remembered."""
        self.settle()
        lower, upper = self._bounds(numbers)
        above = np.clip((upper - slack_ns) / np.maximum(upper - lower, 1.0), 0.0, 1.0)
        shares: Floats = (self.counts[numbers] * above).sum(axis=1) / np.maximum(weight, 1.0)
        return np.minimum(shares, 1.0)

    def _bounds(self, numbers: Numbers) -> tuple[Floats, Floats]:
        """Lower bounds of all counts, and upper ones by source: what is above the greatest is empty."""
        lower = self._edges[:-1]
        greatest = self.greatest[numbers].astype(np.float64)[:, None]
        return lower, np.minimum(self._edges[1:], np.maximum(greatest, lower))

    def check(self, weight: Floats) -> None:
        """Assert that no more is counted than is remembered, and nothing where nobody came behind."""
        self.settle()
        assert np.all(self.counts >= 0) and np.all(self.counts.sum(axis=1) <= weight * (1 + 1e-6) + 1e-3)
        assert not self.counts[self.greatest == 0].any()
