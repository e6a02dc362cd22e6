"""All events that are held: the fresh ones as they came, the others in open runs.

Fresh rows gather until there are enough to be dealt at once, or until a mark asks for one of them: pieces of a few rows
cost microseconds of interpreter each to deal and to cut (`ordering.md`). What is fresh came after what the open runs
hold, so equal times stay in order of arrival.

No mark is decided here and no batch is cut. What is released does not depend on the buffer (a test switches it off).
"""

from __future__ import annotations

import numpy as np

from .columns import TIME_MAX, Refs, Times, greatest_of, least_of
from .gathered import Gathered
from .merge import Merger
from .runs import OpenRuns, Run, Strand, runs_of
from .sorting import sorted_stably

FRESH_EVENTS = 1 << 15  # 24 bytes each, once the feed is that busy
# All that is fresh is sorted for one mark while it is at most so many times what came since it was last sorted: a row
# costs 6 ns to sort and a piece that is dealt 3 us.
SORTED_TIMES = 16


class Fresh(Gathered):
    """Gathered rows; the first `sorted` of them are in ascending time (and came before)."""

    def __init__(self, room_at_most: int) -> None:
        super().__init__(room_at_most)
        self.sorted = 0
        self.least = TIME_MAX
        self.greatest = 0  # of no meaning without rows

    def add(self, times: Times, refs: Refs) -> None:
        """Put rows behind those that are there."""
        greatest = greatest_of(times)
        self.greatest = max(self.greatest, greatest) if self.rows else greatest
        self.least = min(self.least, least_of(times))
        super().add(times, refs)

    def in_order(self) -> Strand:
        """The rows in ascending time, as a copy."""
        times, refs = self.strand
        times, order = sorted_stably(times)
        return Strand(times, refs[order])

    def take(self) -> Strand:
        """All rows as they came; none is left."""
        taken = self.copied()
        self.forget()
        return taken

    def cut(self, watermark: int) -> Strand:
        """The rows at or before the watermark, in ascending time; the others stay, sorted."""
        strand = self.in_order()
        place = int(strand.times.searchsorted(watermark, side="right"))
        rest = Strand(strand.times[place:], strand.refs[place:])
        self.forget()
        if len(rest.times):
            self.add(*rest)
            self.sorted = self.rows
        return Strand(strand.times[:place], strand.refs[:place])

    def restore(self, strand: Strand, rows_sorted: int) -> None:
        """Take over saved rows."""
        if len(strand.times):
            self.add(*strand)
        self.sorted = rows_sorted

    def forget(self) -> None:
        """No row is left."""
        super().forget()
        self.sorted = 0
        self.least = TIME_MAX

    def check(self) -> None:
        """Assert that bounds and the sorted part are what they are said to be."""
        super().check()
        times = self.strand.times
        assert 0 <= self.sorted <= self.rows
        assert self.least == min(times.tolist(), default=TIME_MAX)
        assert not self.rows or self.greatest == int(times.max())
        first = times[: self.sorted]
        assert np.all(first[1:] >= first[:-1])


class Held:
    """What a feed holds. `hold` takes an arrival's rows, `release` gives those at or before a mark's watermark."""

    def __init__(self, merger: Merger, *, fresh_events: int | None = None) -> None:
        """At most so many rows (else FRESH_EVENTS) gather before they are dealt; with 0 each arrival is, at once."""
        self._fresh_events = FRESH_EVENTS if fresh_events is None else fresh_events
        self.open, self.fresh, self._merger = OpenRuns(), Fresh(self._fresh_events), merger

    def hold(self, times: Times, refs: Refs) -> None:
        """Hold an arrival's rows (refs as ROWs)."""
        large = 2 * len(times) > self._fresh_events
        if self.fresh.rows and (large or self.fresh.rows + len(times) > self._fresh_events):
            self._deal(*self.fresh.take())
        if large:
            self._deal(times, refs)
        else:
            self.fresh.add(times, refs)

    def _deal(self, times: Times, refs: Refs) -> None:
        for run in runs_of(times, refs):
            self.open.deal(run)

    def release(self, watermark: int) -> Strand:
        """Rows at or before the watermark as one ascending strand."""
        last: list[Strand] = []
        if self.fresh.rows and self.fresh.least <= watermark:
            if self.fresh.rows <= SORTED_TIMES * (self.fresh.rows - self.fresh.sorted):
                last = [self.fresh.cut(watermark)]
            else:
                self._deal(*self.fresh.take())
        heads = [*self.open.cut(watermark), *last]
        return heads[0] if len(heads) == 1 else self._merger.merge(heads)

    # ---- observers ------------------------------------------------------------------------------------------------

    @property
    def held(self) -> int:
        """Events held."""
        return self.open.held + self.fresh.rows

    @property
    def head_ns(self) -> int | None:
        """Least event time held."""
        head = self.open.head_ns
        if not self.fresh.rows:
            return head
        return self.fresh.least if head is None else min(head, self.fresh.least)

    @property
    def tail_ns(self) -> int | None:
        """Greatest event time held."""
        tail = self.open.tail_ns
        if not self.fresh.rows:
            return tail
        return self.fresh.greatest if tail is None else max(tail, self.fresh.greatest)

    @property
    def runs(self) -> list[Run]:
        """All that is held as runs, the oldest first; the fresh rows as one, in order. For those who look only."""
        if not self.fresh.rows:
            return self.open.runs
        run = Run()
        run.append(self.fresh.in_order())
        return [*self.open.runs, run]

    def lengths(self) -> list[int]:
        """Events held by each of `runs`."""
        return [*self.open.lengths(), self.fresh.rows] if self.fresh.rows else self.open.lengths()

    @property
    def comparisons(self) -> int:
        """Comparisons made so far in dealing and cutting."""
        return self.open.comparisons

    def check(self) -> None:
        """Assert the invariants of the buffer and of the runs."""
        self.open.check()
        self.fresh.check()
        assert self.fresh.rows <= self._fresh_events
