"""All events that are held: those near their release, and beyond a bound the fresh ones and those in open runs.

    time ->        bound
    [ near strands ] | [ open runs ]     older
    [ near fresh   ] | [ far fresh ]     younger

A row belongs to one side of the bound by its time alone, so equal times are never on both sides, and each side keeps
them in order of arrival for itself. Marks are served from the near side, which is small. Only a mark that reaches the
bound touches the open runs: it cuts them for many marks at once, because each run costs microseconds of interpreter
each time that it is cut, however few rows leave (`ordering.md`). Where little is held all of it comes near.

No mark is decided here and no batch is cut. What is released does not depend on the bound (a test switches it off).
"""

from __future__ import annotations

from math import isqrt

import numpy as np

from .columns import TIME_MAX, TIME_MIN, Refs, Times
from .fresh import Fresh
from .merge import Merger
from .near import Near
from .runs import OpenRuns, Run, Strand, joined, run_of, runs_of

# So many rows may lie on the near side, and as many may gather beyond it before they are dealt to open runs. About half
# as many come near at once: with arrivals of 5,000 each run is cut once for 13 marks (measured, ordering.md).
NEAR_EVENTS = 1 << 17
TRIES_AT_MOST = 8  # to find a bound that has about half as many rows before it
SPAN_FACTOR = 4  # what the first try goes further by, or less far; its square the second, and so on

Said = tuple[int, int | None, int]  # strands that are near, the bound (None: before all times), the span


class Held:
    """What a feed holds. `hold` takes an arrival's rows, `release` gives those at or before a mark's watermark."""

    def __init__(self, merger: Merger, *, near_events: int | None = None) -> None:
        """At most so many rows (else NEAR_EVENTS) are near; with 0 none is, and each arrival is dealt."""
        self._near_events = NEAR_EVENTS if near_events is None else near_events
        self.near, self.open, self.far, self._merger = Near(merger), OpenRuns(), Fresh(), merger
        self.bound = TIME_MAX if self._near_events else TIME_MIN - 1
        self._span = 0  # from the last bound to the one before it; 0 before there was one

    def hold(self, times: Times, refs: Refs) -> None:
        """Hold an arrival's rows (refs as ROWs)."""
        if not self._near_events:
            self._deal(times, refs)
            return
        if self.bound == TIME_MAX:
            self.near.fresh.add(times, refs)
        else:
            self._divide(times, refs)
        if self.near.rows > self._near_events:
            self._narrow()
        if self.far.rows > self._near_events:
            self._deal(*self.far.take())

    def _divide(self, times: Times, refs: Refs) -> None:
        """Each row to its side of the bound."""
        within = times <= self.bound
        rows = int(np.count_nonzero(within))
        if rows == 0:
            self.far.add(times, refs)
        elif rows == len(times):
            self.near.fresh.add(times, refs)
        else:
            which = np.flatnonzero(within)
            self.near.fresh.put(times[which], refs[which])
            which = np.flatnonzero(~within)
            self.far.put(times[which], refs[which])

    def _deal(self, times: Times, refs: Refs) -> None:
        for run in runs_of(times, refs):
            self.open.deal(run)

    def _narrow(self) -> None:
        """Move the bound back, so that half as many rows are near as may be; the others are dealt."""
        self.bound, beyond = self.near.cut_beyond(self._near_events // 2)
        self.open.deal(beyond)

    def release(self, watermark: int) -> Strand:
        """Rows at or before the watermark as one ascending strand."""
        if not self._near_events:
            return self._merger.merge(self.open.cut(watermark))
        strand = self._merger.merge(self.near.cut(watermark))
        if watermark >= self.bound and (self.far.rows or self.open.held):
            beyond = self._fetch(watermark)
            if len(beyond.times):
                return joined([strand, beyond]) if len(strand.times) else beyond
        return strand

    def _fetch(self, watermark: int) -> Strand:
        """Move the bound on, at least to the watermark; nothing is near. The rows at or before the watermark."""
        if min(self.far.least, TIME_MAX if self.open.head_ns is None else self.open.head_ns) > watermark:
            self.bound = watermark
            return self._merger.merge([])
        if self.far.rows:
            self._deal(*self.far.take())
        self.bound = self._next_bound(watermark)
        strand = self._merger.merge(self.open.cut(self.bound))
        self.near.put(strand)
        return self._merger.merge(self.near.cut(watermark))

    def _next_bound(self, watermark: int) -> int:
        """A time at or beyond the watermark that has about half as many rows before it as may be near, never more.

        Rows at or before the watermark leave at once and do not count. Looked for is how far beyond the watermark it
        lies: further than `low`, which takes no more than may be near, and less far than `high`, which takes more.
        """
        wanted, tail, passed = self._near_events // 2, self.open.tail_ns, self.open.count(watermark)
        assert tail is not None
        if self.open.held - passed <= wanted:
            return TIME_MAX
        span = self._span or (tail - watermark) * wanted // self.open.held
        low, rows_low, high, factor = 0, 0, tail - watermark, SPAN_FACTOR
        for _ in range(TRIES_AT_MOST):
            span = min(max(span, low + 1), high)
            rows = self.open.count(watermark + span) - passed
            if rows > self._near_events:
                high = span
            else:
                low, rows_low = span, rows
            if (low and SPAN_FACTOR * rows_low >= wanted) or high - low <= 1:
                break
            further = low * factor if low * factor < high else isqrt(low * high)
            span = further if low else high // factor
            factor *= factor
        self._span = min(low * wanted // rows_low if rows_low else low or high, TIME_MAX)
        return watermark + low

    # ---- observers and snapshots ------------------------------------------------------------------------------------

    @property
    def held(self) -> int:
        """Events held."""
        return self.near.rows + self.open.held + self.far.rows

    @property
    def head_ns(self) -> int | None:
        """Least event time held."""
        if self.near.rows:
            return self.near.least
        head = self.open.head_ns
        if not self.far.rows:
            return head
        return self.far.least if head is None else min(head, self.far.least)

    @property
    def tail_ns(self) -> int | None:
        """Greatest event time held."""
        tail = self.open.tail_ns
        if self.far.rows:
            return self.far.greatest if tail is None else max(tail, self.far.greatest)
        return self.near.greatest if tail is None and self.near.rows else tail

    @property
    def runs(self) -> list[Run]:
        """All that is held as runs, the oldest first: what is near as one, what gathers beyond the bound as one more.

        For who looks only: these two are copied (some 4 ms at most).
        """
        near = [run_of(self.near.copied())] if self.near.rows else []
        return [*near, *self.open.runs, *([run_of(self.far.copied())] if self.far.rows else [])]

    def lengths(self) -> list[int]:
        """Events held by each of `runs`."""
        return [rows for rows in (self.near.rows, *self.open.lengths(), self.far.rows) if rows]

    @property
    def comparisons(self) -> int:
        """Comparisons made so far in dealing and cutting."""
        return self.near.comparisons + self.open.comparisons

    def saved(self) -> tuple[list[Strand], Said]:
        """All that is not in open runs, and what must be known of it. None of it changes any more."""
        bound = None if self.bound < TIME_MIN else self.bound
        strands = [*self.near.strands, self.near.fresh.copied(), self.far.copied()]
        return strands, (len(self.near.strands), bound, self._span)

    def restore(self, strands: list[Strand], said: Said | None) -> None:
        """Take over what was saved, once the open runs are. Without a word on it: it is younger than the open runs."""
        if said is None or not self._near_events:
            if self.open.held and self._near_events:
                self.bound = TIME_MIN - 1
            for strand in strands:
                if len(strand.times):
                    self.hold(*strand)
            return
        count, bound, self._span = int(said[0]), said[1] if said[1] is None else int(said[1]), int(said[2])
        self.bound = TIME_MIN - 1 if bound is None else bound
        for strand in strands[:count]:
            self.near.put(strand)
        for fresh, strand in zip((self.near.fresh, self.far), strands[count:], strict=True):
            if len(strand.times):
                fresh.add(*strand)
        if self.far.rows > self._near_events:  # it was more than may gather here
            self._deal(*self.far.take())

    def check(self) -> None:
        """Assert the invariants of both sides, and that the bound divides them."""
        self.near.check()
        self.open.check()
        self.far.check()
        if self._near_events:
            assert not self.near.rows or self.near.greatest <= self.bound
            assert self._span >= 0
            assert not self.far.rows or self.far.least > self.bound
            assert self.open.head_ns is None or self.open.head_ns > self.bound
            assert self.far.rows <= self._near_events
        else:
            assert not self.near.rows and not self.far.rows
