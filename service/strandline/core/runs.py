"""Runs: how an arrival falls into stretches in ascending time, and how those are dealt over the open runs.

Methods: natural runs with strictly descending stretches reversed and short ones extended by a stable sort, as CPython's
listsort notes describe; dealing as in patience sorting (Chandramouli & Goldstein, SIGMOD 2014; Chandramouli, Goldstein
& Li, ICDE 2018). No watermark and no merging here. `ordering.md` tells why equal times keep their order.
"""

from __future__ import annotations

from collections import deque
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from .columns import Refs, Times
from .gallop import gallop_right
from .sorting import ROWS_A_FALL, sorted_runs, sorted_stably

# A run costs some 8 us of interpreter time to deal and to cut, a stable sort 26 to 47 ns an event: below about a
# thousand events sorting a stretch together is cheaper than keeping its natural runs apart. The published minimum of 32
# to 64 is for elements compared one by one; it takes the top 6 bits of n, this takes the top 13 (5,000 stays whole).
MINIMUM_RUN_BITS = 13
COALESCE_EVENTS = 1024  # neighbouring chunks of a run up to this size are joined; a chunk costs some 500 bytes


class Strand(NamedTuple):
    """Events in ascending time: two columns of equal length, refs as ROWs."""

    times: Times
    refs: Refs


class Stretch(NamedTuple):
    """A stretch of an arrival: rows start to stop, and what must be done to make it a run."""

    start: int
    stop: int
    order: str  # "ascending", "descending" (strictly) or "mixed"


def minimum_run(events: int, bits: int = 6) -> int:
    """Least length of a run: the top `bits` bits of n, plus 1 if any lower bit is set (CPython's listsort notes)."""
    dropped = 0
    while events >= 1 << bits:
        dropped |= events & 1
        events >>= 1
    return events + dropped


def stretches(times: Times, minimum: int) -> list[Stretch]:
    """Cut a time column into natural runs of at least `minimum` rows and mixed stretches between them, in order."""
    rows = len(times)
    if rows == 0:
        return []
    down, falls = falls_of(times)
    if falls == 0:
        return [Stretch(0, rows, "ascending")]
    if falls == rows - 1:
        return [Stretch(0, rows, "descending")]
    turns = np.flatnonzero(down[1:] != down[:-1]) + 1
    starts = np.concatenate(([0], turns))
    stops = np.concatenate((turns, [rows - 1])) + 1
    found: list[Stretch] = []
    done = 0
    for index in np.flatnonzero(stops - starts >= minimum).tolist():
        start, stop = max(int(starts[index]), done), int(stops[index])
        if 0 < start - done < minimum:
            start = done + minimum  # extend the short stretch before it to the minimum run
        if stop - start < minimum:
            continue
        if start > done:
            found.append(Stretch(done, start, "mixed"))
        found.append(Stretch(start, stop, "descending" if down[int(starts[index])] else "ascending"))
        done = stop
    if done < rows:
        found.append(Stretch(done, rows, "mixed"))
    return found


def falls_of(times: Times) -> tuple[NDArray[np.bool_], int]:
    """Where a time is below the one before it, and how often."""
    down = times[1:] < times[:-1]
    return down, int(np.count_nonzero(down))


def runs_of(times: Times, refs: Refs, minimum: int | None = None) -> list[Strand]:
    """The arrival's rows as runs; concatenated and stably sorted they equal the arrival stably sorted.

    Without a `minimum`, rows of which some fall and some rise are one run at once: looking for long stretches in them
    costs as much as their sort. Rows that fall nearly throughout are looked at more closely.
    """
    rows = len(times)
    if rows < 2:
        return [Strand(times, refs)] if rows else []
    if minimum is None:
        falls = falls_of(times)[1]
        if falls == 0:
            return [Strand(times, refs)]
        if ROWS_A_FALL * (rows - falls) > rows:
            times, places = sorted_runs(times, falls)
            return [Strand(times, refs[places])]
        minimum = minimum_run(rows, MINIMUM_RUN_BITS)
    result = []
    for start, stop, order in stretches(times, minimum):
        part, part_refs = times[start:stop], refs[start:stop]
        if order == "descending":
            part, part_refs = part[::-1].copy(), part_refs[::-1].copy()
        elif order == "mixed":
            part, places = sorted_stably(part)
            part_refs = part_refs[places]
        result.append(Strand(part, part_refs))
    return result


class Run:
    """One open run: chunks of columns, ascending throughout."""

    __slots__ = ("chunks", "length")

    def __init__(self) -> None:
        self.chunks: deque[Strand] = deque()
        self.length = 0

    def append(self, piece: Strand) -> None:
        """Add rows whose times are at or above the tail; a part of longer columns is copied, so that it keeps none."""
        self.length += len(piece.times)
        if self.chunks:
            last = self.chunks[-1]
            if len(last.times) + len(piece.times) <= COALESCE_EVENTS:
                joined = (np.concatenate((last.times, piece.times)), np.concatenate((last.refs, piece.refs)))
                self.chunks[-1] = Strand(*joined)
                return
        self.chunks.append(owned(piece))

    def cut(self, watermark: int) -> tuple[list[Strand], int]:
        """Take the rows at or before the watermark off the head: their chunks, and the comparisons it took."""
        taken: list[Strand] = []
        comparisons = 0
        while self.chunks:
            chunk = self.chunks[0]
            comparisons += 1
            if int(chunk.times[-1]) <= watermark:
                taken.append(self.chunks.popleft())
                continue
            place, probes = gallop_right(chunk.times, watermark)
            comparisons += probes
            if place:
                taken.append(Strand(chunk.times[:place], chunk.refs[:place]))
                self.chunks[0] = rest_of(chunk, place)
            break
        self.length -= sum(len(chunk.times) for chunk in taken)
        return taken, comparisons

    def count(self, bound: int) -> int:
        """How many rows lie at or before a bound."""
        rows = 0
        for chunk in self.chunks:
            if chunk.times.item(-1) > bound:
                return rows + int(chunk.times.searchsorted(bound, side="right"))
            rows += len(chunk.times)
        return rows


def rest_of(strand: Strand, place: int) -> Strand:
    """The rows from a place on; copied once less than half of what they are a view of is left, to free heap."""
    rest = Strand(strand.times[place:], strand.refs[place:])
    base = rest.times.base
    if isinstance(base, np.ndarray) and 2 * len(rest.times) < len(base):
        return Strand(rest.times.copy(), rest.refs.copy())
    return rest


def owned(strand: Strand) -> Strand:
    """The same rows; copied if they are a part of longer columns."""
    base = strand.times.base
    if isinstance(base, np.ndarray) and len(strand.times) < len(base):
        return Strand(strand.times.copy(), strand.refs.copy())
    return strand


def run_of(strand: Strand) -> Run:
    """Rows in any order as one run."""
    times, order = sorted_stably(strand.times)
    run = Run()
    run.append(Strand(times, strand.refs[order]))
    return run


class OpenRuns:
    """The open runs in order of opening; their tails strictly descend.

    Tails and heads are kept as columns, so that dealing and cutting touch only runs that take part. Tails are kept
    turned round (all bits inverted, which unlike a minus never overflows), so that they ascend and can be searched.
    """

    def __init__(self) -> None:
        self.runs: list[Run] = []
        self.held = 0
        self.comparisons = 0
        self.opened = 0
        self._turned_tails = np.empty(16, dtype=np.int64)
        self._heads = np.empty(16, dtype=np.int64)
        self._head_ns: int | None = None

    def deal(self, strand: Strand) -> None:
        """Put a run's rows behind the first open run whose tail they may follow; what fits nowhere opens a run."""
        times, refs = strand
        rows, count = len(times), len(self.runs)
        if not rows:
            return
        self.held += rows
        # Only the runs between the one that takes the last row and the one that takes the first can take part.
        first = self._taker(int(times[-1]))
        last = self._taker(int(times[0])) if rows > 1 else first
        if first == last < count:
            self._extend(first, strand)
            return
        tails = ~self._turned_tails[first : min(last + 1, count)]
        cuts = np.searchsorted(times, tails)
        self.comparisons += len(cuts) * rows.bit_length()
        stops = np.concatenate(([rows], cuts))
        for offset in np.flatnonzero(stops[:-1] > cuts).tolist():
            start, stop = int(cuts[offset]), int(stops[offset])
            self._extend(first + offset, Strand(times[start:stop], refs[start:stop]))
        if last == count:
            self._open(Strand(times[: stops[-1]], refs[: stops[-1]]))

    def _taker(self, time: int) -> int:
        """Index of the first run that a row of this time may follow (its tail is at or before it); else their count."""
        turned = self._turned_tails[: len(self.runs)]
        if len(turned) and time >= ~int(turned[0]):  # most rows follow the run that is furthest ahead
            self.comparisons += 1
            return 0
        self.comparisons += 1 + len(turned).bit_length()
        return int(turned.searchsorted(~time))

    def reopen(self, strand: Strand) -> None:
        """Open a saved run again, behind the ones that were opened before it."""
        self.held += len(strand.times)
        self._open(strand)

    def _extend(self, index: int, piece: Strand) -> None:
        self.runs[index].append(piece)
        self._turned_tails[index] = ~int(piece.times[-1])

    def _open(self, piece: Strand) -> None:
        count = len(self.runs)
        if count == len(self._heads):
            self._turned_tails = np.resize(self._turned_tails, 2 * count)
            self._heads = np.resize(self._heads, 2 * count)
        run = Run()
        run.append(piece)
        self.runs.append(run)
        self._turned_tails[count], self._heads[count] = ~int(piece.times[-1]), piece.times[0]
        head = int(piece.times[0])
        self._head_ns = head if self._head_ns is None else min(self._head_ns, head)
        self.opened += 1

    def cut(self, watermark: int) -> list[Strand]:
        """Heads at or before the watermark, one strand for each run that has one, in order of opening."""
        if self._head_ns is None or self._head_ns > watermark:
            return []
        count = len(self.runs)
        heads: list[Strand] = []
        closed: list[int] = []
        for index in np.flatnonzero(self._heads[:count] <= watermark).tolist():
            run = self.runs[index]
            chunks, comparisons = run.cut(watermark)
            self.comparisons += comparisons
            heads.append(joined(chunks))
            self.held -= len(heads[-1].times)
            if run.length:
                self._heads[index] = run.chunks[0].times[0]
            else:
                closed.append(index)
        if closed:
            self._close(closed)
        self._head_ns = int(self._heads[: len(self.runs)].min()) if self.runs else None
        return heads

    def count(self, bound: int) -> int:
        """How many rows a cut there would take."""
        count = len(self.runs)
        return sum(self.runs[index].count(bound) for index in np.flatnonzero(self._heads[:count] <= bound).tolist())

    def _close(self, closed: list[int]) -> None:
        """Forget the runs at these indices (ascending)."""
        count = len(self.runs)
        stay = count - len(closed)
        if stay:
            self._turned_tails[:stay] = np.delete(self._turned_tails[:count], closed)
            self._heads[:stay] = np.delete(self._heads[:count], closed)
        if 16 * len(closed) < count:  # moving the list up costs 1 us a closed run, walking over it 20 ns an open one
            for index in reversed(closed):
                del self.runs[index]
        else:
            self.runs = [run for run in self.runs if run.length]

    @property
    def head_ns(self) -> int | None:
        """Least event time held."""
        return self._head_ns

    @property
    def tail_ns(self) -> int | None:
        """Greatest event time held."""
        return ~int(self._turned_tails[0]) if self.runs else None

    def lengths(self) -> list[int]:
        """Events held by each open run."""
        return [run.length for run in self.runs]

    def check(self) -> None:
        """Assert the invariants: tails strictly descend, runs ascend, columns and counts agree with the chunks."""
        count = len(self.runs)
        tails = ~self._turned_tails[:count]
        assert np.all(tails[1:] < tails[:-1]), "tails must strictly descend"
        for index, run in enumerate(self.runs):
            times = np.concatenate([chunk.times for chunk in run.chunks])
            assert len(times) == run.length > 0 and np.all(times[1:] >= times[:-1])
            assert times[-1] == tails[index] and times[0] == self._heads[index]
            assert all(len(chunk.times) == len(chunk.refs) > 0 for chunk in run.chunks)
        assert self.held == sum(run.length for run in self.runs)
        assert self._head_ns == min(self._heads[:count].tolist(), default=None)


def joined(chunks: list[Strand]) -> Strand:
    """Chunks one after the other as one strand; a single chunk is passed on without copying."""
    if len(chunks) == 1:
        return chunks[0]
    return Strand(np.concatenate([chunk.times for chunk in chunks]), np.concatenate([chunk.refs for chunk in chunks]))
