"""All events that are held where order is kept within each source only: the fresh ones, the others in lots by source.

Fresh rows gather as they came. When there are many they become a *lot*: rows by source, then time, then arrival, with
columns by source number that say where a source's rows begin and how many of them are gone. A mark looks at those
sources only that it moves, at all of them at once, and through what is fresh: nothing here takes a step of Python for
a source or an event, and no mark looks through the lots, save for what `hold_at_most` asks for. No mark is decided
here; what is released does not depend on how rows lie.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray

from .columns import ROW, Refs, Times, as_refs, as_rows
from .gathered import ROWS_FIRST, Gathered
from .runs import Run, Strand, joined
from .sorting import sorted_stably

LOT_EVENTS = 1 << 14  # at least; else a part of what is held
FRESH_PART = 12
LOTS_AT_MOST = 12
ROWS_A_SOURCE = 64  # with more, few sources are in order by themselves
Sources = NDArray[Any]  # numbers: uint32, or an index


_NOTHING = Strand(np.empty(0, np.int64), np.empty(0, ROW))


class Lot:
    """Rows of one stretch of arrivals by source, then time, then arrival; of each source the first ones may be gone."""

    def __init__(self, times: Times, refs: Refs) -> None:
        """Rows (refs as ROWs) in order of arrival, or by source where equal times are in order of arrival."""
        numbers, order = _by_source(times, as_refs(refs)["source"].astype(np.int64))
        self.times, self.refs = times[order], refs[order]
        self.count = int(numbers[-1]) + 1  # source numbers below it
        ends = np.cumsum(np.bincount(numbers, minlength=self.count))
        self.stops = ends.astype(np.int32)  # 8 bytes a lot and source; a feed holds 10^9 events at most
        self.heads = np.concatenate(([0], ends[:-1])).astype(np.int32)
        self.live = len(times)
        self.place_least = int(as_refs(self.refs)["place"].min())
        self.least = int(times.min())  # event time; of rows that are gone too

    def alive(self) -> NDArray[np.intp]:
        """Indices of the rows that are held."""
        if self.live == len(self.times):
            return np.arange(self.live)
        return np.flatnonzero(np.arange(len(self.times)) >= self.heads[as_refs(self.refs)["source"]])

    def strand(self) -> Strand:
        """The rows that are held."""
        rows = self.alive()
        return Strand(self.times[rows], self.refs[rows])

    def cut(self, numbers: Sources, at: Times) -> Strand | None:
        """Take out the rows of these sources (each named once) at or before their watermarks; None if there are none.

        `at` is a column by source number.
        """
        if len(numbers) and int(numbers[-1]) >= self.count:
            numbers = numbers[: int(numbers.searchsorted(self.count))]
        heads, stops = self.heads[numbers], self.stops[numbers]
        some = np.flatnonzero(heads < stops)
        numbers, heads, stops = numbers[some], heads[some].astype(np.int64), stops[some].astype(np.int64)
        bounds = at[numbers]
        some = np.flatnonzero(self.times[heads] <= bounds)
        if not len(some):
            return None
        numbers, heads, stops, bounds = numbers[some], heads[some], stops[some], bounds[some]
        cuts = self._cuts(heads, stops, bounds)
        counts = cuts - heads
        ends = np.cumsum(counts)
        rows = np.arange(int(ends[-1])) + np.repeat(heads - ends + counts, counts)
        self.heads[numbers] = cuts
        self.live -= len(rows)
        return Strand(self.times[rows], self.refs[rows])

    def _cuts(self, heads: NDArray[Any], stops: NDArray[Any], bounds: Times) -> NDArray[Any]:
        """Of each source the first row above its bound: an exponential search, all of them in step."""
        low, open_rows, step = heads + 1, np.arange(len(heads)), 1  # rows before `low` are at or before the bound
        high = stops.copy()
        while len(open_rows):
            probe = low[open_rows] + step - 1
            within = probe < stops[open_rows]
            open_rows, probe = open_rows[within], probe[within]
            passed = self.times[probe] <= bounds[open_rows]
            high[open_rows[~passed]] = probe[~passed]
            open_rows = open_rows[passed]
            low[open_rows] = probe[passed] + 1
            step *= 2
        open_rows = np.flatnonzero(low < high)
        while len(open_rows):
            middle = (low[open_rows] + high[open_rows]) >> 1
            passed = self.times[middle] <= bounds[open_rows]
            low[open_rows[passed]] = middle[passed] + 1
            high[open_rows[~passed]] = middle[~passed]
            open_rows = open_rows[low[open_rows] < high[open_rows]]
        return low

    def check(self) -> None:
        """Assert that rows lie by source and time, equal times in order of arrival, and that columns say where."""
        refs = as_refs(self.refs)
        order = np.lexsort((refs["place"], self.times, refs["source"]))
        assert np.array_equal(order, np.arange(len(order)))
        assert self.count == len(self.heads) == len(self.stops) and int(self.stops[-1]) == len(self.times)
        begins = np.concatenate(([0], self.stops[:-1]))
        assert np.all((begins <= self.heads) & (self.heads <= self.stops))
        assert np.array_equal(np.bincount(refs["source"], minlength=self.count), self.stops - begins)
        assert self.live == int((self.stops - self.heads).sum()) == len(self.alive()) > 0
        assert self.place_least == int(refs["place"].min()) and self.least == int(self.times.min())


class HeldBySource:
    """What such a feed holds. `hold` takes an arrival's rows, `release` gives those that their source has passed."""

    def __init__(self, *, fresh_events: int | None = None) -> None:
        """At least so many rows (else LOT_EVENTS) gather before they become a lot."""
        self.lots: list[Lot] = []
        self._fresh_events = LOT_EVENTS if fresh_events is None else fresh_events
        self.fresh = Gathered()

    # ---- in -------------------------------------------------------------------------------------------------------

    def hold(self, times: Times, refs: Refs) -> None:
        """Hold an arrival's rows (refs as ROWs)."""
        rows = self.fresh.rows
        if rows and rows + len(times) > max(self._fresh_events, self.held // FRESH_PART):
            self._seal()
        self.fresh.add(times, refs)

    def take_over(self, strands: Sequence[Strand]) -> None:
        """Hold what was held otherwise, in whatever order."""
        self.hold(*_by_arrival(*joined(list(strands))))

    def _seal(self) -> None:
        """What is fresh becomes a lot; a lot that holds less than the next one is joined with it."""
        self.lots.append(Lot(*self.fresh.strand))
        if self.fresh.room > 8 * self._fresh_events + ROWS_FIRST:
            self.fresh = Gathered()  # room of a time when far more was held is given back
        self.fresh.forget()
        index = len(self.lots) - 2
        while index >= 0:
            one, other = self.lots[index : index + 2]
            if one.live < other.live or len(self.lots) > LOTS_AT_MOST:
                self.lots[index : index + 2] = [Lot(*joined([one.strand(), other.strand()]))]
            index -= 1

    # ---- out ------------------------------------------------------------------------------------------------------

    def release(self, numbers: Sources, at: Times) -> Strand:
        """Rows of these sources (ascending, each once) at or before their watermarks, by time, then arrival.

        `at` is the column of all watermarks; rows of other sources lie above theirs.
        """
        if not len(numbers):
            return _NOTHING
        bound = int(at[numbers].max())  # what lies above it is of no source that moved
        old = [lot for lot in self.lots if lot.least <= bound]
        strands = [strand for lot in old if (strand := lot.cut(numbers, at)) is not None]
        if strands:
            self.lots = [self._tight(lot) for lot in self.lots if lot.live]
        if (fresh := self._cut_fresh(at, bound)) is not None:
            strands.append(fresh)
        if not strands:
            return _NOTHING
        return _in_order(*joined(strands))

    def _cut_fresh(self, at: Times, bound: int) -> Strand | None:
        times, refs = self.fresh.strand
        rows = np.flatnonzero(times <= bound)
        rows = rows[times[rows] <= at[as_refs(refs[rows])["source"]]] if len(rows) else rows
        if not len(rows):
            return None
        strand = Strand(times[rows], refs[rows])
        stays = np.ones(len(times), dtype=np.bool_)
        stays[rows] = False
        self.fresh.keep(np.flatnonzero(stays))
        return strand

    @staticmethod
    def _tight(lot: Lot) -> Lot:
        """The lot without the rows that are gone, once they are the greater part of it and worth the columns."""
        gone = len(lot.times) - lot.live
        return Lot(*lot.strand()) if gone > max(lot.live, LOT_EVENTS, lot.count) else lot

    # ---- observers ------------------------------------------------------------------------------------------------

    @property
    def held(self) -> int:
        """Events held."""
        return self.fresh.rows + sum(lot.live for lot in self.lots)

    @property
    def head_ns(self) -> int | None:
        """Least event time held (costs what is held)."""
        times = self.columns()[0]
        return int(times.min()) if len(times) else None

    @property
    def tail_ns(self) -> int | None:
        """Greatest event time held (costs what is held)."""
        times = self.columns()[0]
        return int(times.max()) if len(times) else None

    def columns(self) -> tuple[Times, NDArray[np.uint32]]:
        """Times and source numbers of all that is held."""
        strand = self._all()
        return strand.times, as_refs(strand.refs)["source"]

    def sample(self, rows_at_most: int) -> Strand:
        """Rows spread evenly over all that is held, in ascending time: no more than so many, save for a few a lot."""
        step = -(-(self.fresh.rows + sum(len(lot.times) for lot in self.lots)) // rows_at_most) or 1
        times, refs = self.fresh.strand
        strands = [Strand(times[::step], refs[::step])]
        for lot in self.lots:
            rows = np.arange(0, len(lot.times), step)
            rows = rows[rows >= lot.heads[as_refs(lot.refs[rows])["source"]]]
            strands.append(Strand(lot.times[rows], lot.refs[rows]))
        return _in_order(*joined(strands))

    def rows_before(self, place: int) -> tuple[Times, NDArray[np.uint32]]:
        """Times and source numbers of what is held of lines before this place in the journal."""
        strands = [lot.strand() for lot in self.lots if lot.place_least < place]
        times, refs = joined([*strands, self.fresh.strand])
        found = np.flatnonzero(as_refs(refs)["place"] < place)
        return times[found], as_refs(refs[found])["source"]

    def copied(self) -> Strand:
        """All that is held in order of arrival: the same whatever became of it in between."""
        return _by_arrival(*self._all())

    def _all(self) -> Strand:
        if not self.lots:
            return self.fresh.copied()
        return joined([*(lot.strand() for lot in self.lots), self.fresh.strand])

    @property
    def runs(self) -> list[Run]:
        """All that is held as one run. For those who look only: costs what is held."""
        strand = self._all()
        if not len(strand.times):
            return []
        run = Run()
        run.append(_in_order(*strand))
        return [run]

    def lengths(self) -> list[int]:
        """Events in each lot, and those that are fresh."""
        return [*(lot.live for lot in self.lots), *([self.fresh.rows] if self.fresh.rows else [])]

    @property
    def comparisons(self) -> int:
        """Comparisons between runs: there are none here."""
        return 0

    def check(self) -> None:
        """Assert the invariants of lots and fresh rows: what is in a later one came later."""
        self.fresh.check()
        assert len(self.lots) <= LOTS_AT_MOST + 1
        last = -1
        for lot in self.lots:
            lot.check()
            places = as_refs(lot.refs)["place"]
            assert lot.place_least > last
            last = int(places.max())
        places = as_refs(self.fresh.strand.refs)["place"]
        assert not len(places) or (int(places[0]) > last and np.all(places[1:] > places[:-1]))


def _in_order(times: Times, refs: Refs) -> Strand:
    """Rows by time; equal times in order of arrival, which is that of their places in the journal."""
    order = _arrival_order(refs)
    times, by_time = sorted_stably(times[order])
    return Strand(times, as_rows(refs)[order[by_time]])


def _by_source(times: Times, numbers: NDArray[np.int64]) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
    """Source numbers in ascending order, and the rows by source, then time, then as they came.

    Where sources are many they mostly are in order by themselves, and sorting by source is all there is to do.
    """
    rows = len(times)
    if rows > ROWS_A_SOURCE * (int(numbers.max()) + 1):
        by_time = sorted_stably(times)[1]
        numbers, order = sorted_stably(numbers[by_time])
        return numbers, by_time[order]
    numbers, order = sorted_stably(numbers)
    placed = times[order]
    falls = np.flatnonzero((placed[1:] < placed[:-1]) & (numbers[1:] == numbers[:-1]))
    if len(falls):
        flags = np.zeros(int(numbers[-1]) + 1, dtype=np.bool_)
        flags[numbers[falls]] = True
        mixed = np.flatnonzero(flags[numbers])  # all rows of sources that are not in order
        by_time = sorted_stably(placed[mixed])[1]
        order[mixed] = order[mixed][by_time[sorted_stably(numbers[mixed][by_time])[1]]]
    return numbers, order


def _by_arrival(times: Times, refs: Refs) -> Strand:
    order = _arrival_order(refs)
    return Strand(times[order], as_rows(refs)[order])


def _arrival_order(refs: Refs) -> NDArray[np.int64]:
    return sorted_stably(np.ascontiguousarray(as_refs(refs)["place"]))[1]
