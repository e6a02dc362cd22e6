"""Reordering of an arrival sequence in the terms of RFC 4737 (Packet Reordering Metrics, November 2006).

Keys are sequence numbers of one source, or event times. Positions count from 0 among the arrivals that are analysed
(the RFC counts from 1); `kept` leads back to the rows that were given. How disorder is counted is in `disorder.py`;
reorder density and buffer occupancy (RFC 5236) are in `density.py`, gaps that filled and gaps that did not in
`gaps.py`.

Event times instead of sequence numbers: equal times are neither duplicates nor reordered, and sequence discontinuities
have no meaning.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from .disorder import (
    consecutive_greater,
    earlier_not_greater,
    first_greater,
    newest_before,
    overtakers,
    overtaking_bytes,
    reordered_positions,
)

Int64s = NDArray[np.int64]

KEY_LEAST, KEY_GREATEST = -(2**62), 2**62  # so that the difference of two fits in int64


@dataclass(frozen=True, slots=True)
class Runs:
    """Reordering-free runs (section 4.6.3), by the counters of the RFC. None where nothing was reordered.

    `closed` are the lengths of the runs that a reordered arrival ended; the one that is still open is in no figure.
    """

    x: int  # runs, that is reordered arrivals
    a: int  # arrivals in order
    p: int  # arrivals
    q: int  # sum of the squares of the closed runs
    closed: Int64s
    open: int

    @property
    def percent_in_order(self) -> float | None:
        """100 a / p."""
        return 100 * self.a / self.p if self.p else None

    @property
    def mean(self) -> float | None:
        """Mean run, a / x."""
        return self.a / self.x if self.x else None

    @property
    def mean_square(self) -> float | None:
        """q / a: the mean length of the run that an arrival in order is in."""
        return self.q / self.a if self.a else None

    @property
    def variation(self) -> float | None:
        """(q / a) / (a / x): 1 where all runs are equally long."""
        return (self.q / self.a) / (self.a / self.x) if self.a and self.x else None


@dataclass(frozen=True, slots=True)
class NReordering:
    """n-reordering (section 5.3): counts[n - 1] arrivals come just behind n and more greater ones.

    The RFC gives two denominators: definition 2 divides by all arrivals, the listing of its appendix A by all but n.
    Both are here by name; figures of this package use the definition.
    """

    received: int
    counts: Int64s

    @property
    def greatest(self) -> int:
        """The greatest n that occurs; 0 without any reordering (definition 4)."""
        return len(self.counts)

    def degree_by_definition(self, n: int) -> float:
        """m / l (definition 2)."""
        return self._count(n) / self.received

    def degree_by_listing(self, n: int) -> float:
        """m / (l - n), as the listing of appendix A divides."""
        return self._count(n) / (self.received - n)

    def _count(self, n: int) -> int:
        if not 1 <= n < self.received:
            raise ValueError(f"of {self.received} arrivals n goes from 1 to {self.received - 1}, not {n}")
        return int(self.counts[n - 1]) if n <= len(self.counts) else 0


@dataclass(frozen=True, slots=True)
class Discontinuities:
    """Reordering discontinuities (section 4.5), in the order in which they were found, with the gaps between them.

    `positions` are the arrivals before which reordered ones should have come. A gap reaches back to the nearest
    discontinuity before it that had been found by then; where there is none it is 0.
    """

    positions: Int64s
    gaps: Int64s
    gap_times_ns: Int64s | None


class Reordering:
    """The figures of one arrival sequence; each is worked out when it is asked for.

    `keys` int64 in order of arrival; `arrivals` (arrival clock, ns) and `lengths` (payload bytes) are needed for late
    times, gap times and byte offsets only. `numbered`: keys are sequence numbers, so a key that comes again is a
    duplicate and left out after its first copy. Raises ValueError for columns of different lengths, or keys beyond
    2^62.
    """

    def __init__(
        self,
        keys: Int64s,
        arrivals: Int64s | None = None,
        lengths: NDArray[np.integer] | None = None,
        *,
        numbered: bool = True,
    ) -> None:
        for column in (arrivals, lengths):
            if column is not None and len(column) != len(keys):
                raise ValueError(f"{len(keys)} keys, but a column of {len(column)}")
        if len(keys) and not (keys.min() >= KEY_LEAST and keys.max() <= KEY_GREATEST):
            raise ValueError("keys must lie between -2^62 and 2^62")
        self.numbered = numbered
        self.kept = first_copies(keys) if numbered else np.arange(len(keys))
        self.duplicates = len(keys) - len(self.kept)
        self.keys = keys[self.kept] if self.duplicates else keys
        self._arrivals = None if arrivals is None else arrivals[self.kept]
        self._lengths = None if lengths is None else lengths[self.kept]

    @property
    def received(self) -> int:
        """L: arrivals without duplicates."""
        return len(self.keys)

    @cached_property
    def reordered(self) -> Int64s:
        """Positions of the reordered arrivals (section 3.3)."""
        return reordered_positions(self.keys)

    @property
    def ratio(self) -> float:
        """R: reordered arrivals over all (section 4.1.3); 0 of nothing."""
        return len(self.reordered) / self.received if self.received else 0.0

    @cached_property
    def gaps_in_sequence(self) -> tuple[Int64s, Int64s]:
        """Sequence discontinuities (section 3.4): positions that were in order but not expected yet, and their sizes.

        A size is how many numbers were missing then, to come late or never. The first arrival has none.
        """
        if not self.numbered:
            raise ValueError("event times have no sequence discontinuities")
        sizes = self.keys - newest_before(self.keys) - 1
        positions = np.flatnonzero(sizes > 0)
        return positions, sizes[positions]

    @cached_property
    def first_greater(self) -> Int64s:
        """For each reordered arrival its reordering discontinuity: the position of the first greater arrival."""
        return first_greater(self.keys, self.reordered)

    @property
    def extents(self) -> Int64s:
        """For each reordered arrival how many positions it came too late (section 4.2.3)."""
        return self.reordered - self.first_greater

    @property
    def late_times_ns(self) -> Int64s:
        """For each reordered arrival how long after its discontinuity it came (section 4.3.3)."""
        return self._clock()[self.reordered] - self._clock()[self.first_greater]

    @cached_property
    def byte_offsets(self) -> Int64s:
        """For each reordered arrival the bytes of greater ones before it, which a receiver stores (section 4.4.3)."""
        if self._lengths is None:
            raise ValueError("byte offsets need a column of lengths")
        return overtaking_bytes(self.keys, self._lengths)[self.reordered]

    @cached_property
    def overtakers(self) -> Int64s:
        """For each arrival how many greater ones came before it; the greatest is the slots a sorting buffer needs."""
        return overtakers(self.keys)

    @cached_property
    def discontinuities(self) -> Discontinuities:
        """Reordering discontinuities and gaps (section 4.5)."""
        positions, first = np.unique(self.first_greater, return_index=True)
        nearest = earlier_not_greater(first)  # by position: the one before it that was found earlier
        gaps = np.where(nearest < 0, 0, positions - positions[nearest])
        found = np.argsort(first)
        times = None
        if self._arrivals is not None:
            clock = self._arrivals[positions]
            times = np.where(nearest < 0, 0, clock - clock[nearest])[found]
        return Discontinuities(positions[found], gaps[found], times)

    @cached_property
    def runs(self) -> Runs:
        """Reordering-free runs (section 4.6)."""
        closed = np.diff(self.reordered, prepend=-1) - 1
        x = len(closed)
        last = int(self.reordered[-1]) if x else -1
        squares = sum(int(part @ part) for part in np.array_split(closed, x // 2**20 + 1))
        return Runs(x, self.received - x, self.received, squares, closed, self.received - 1 - last)

    @cached_property
    def n_reordering(self) -> NReordering:
        """How many arrivals are n-reordered, for each n that occurs (section 5.3)."""
        exactly = np.bincount(consecutive_greater(self.keys)[self.reordered])[1:]
        return NReordering(self.received, np.cumsum(exactly[::-1])[::-1])

    def _clock(self) -> Int64s:
        if self._arrivals is None:
            raise ValueError("late times need a column of arrivals")
        return self._arrivals


def first_copies(keys: Int64s) -> Int64s:
    """Rows of the first arrival of each key, in order of arrival."""
    order = np.argsort(keys, kind="stable")
    ordered = keys[order]
    first = np.ones(len(keys), dtype=np.bool_)
    first[order[1:]] = ordered[1:] != ordered[:-1]
    return np.flatnonzero(first)
