"""Merging the cut heads of runs into one strand: neighbours only, in the order that the power rule gives, galloping.

Methods: power rule, Munro & Wild 2018 (ESA), as computed in CPython's listsort notes; galloping with an adaptive
threshold from the same notes (7 wins in a row is common practice, no source); ties go to the older run. No runs are
opened or closed here and no watermark is known. `ordering.md` holds the measurements behind the constants.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from itertools import pairwise

import numpy as np

from .columns import ROW, as_rows, empty_refs, empty_times
from .gallop import gallop_left, gallop_right
from .runs import Strand, joined
from .sorting import packed

GALLOP_WINS = 7
GALLOP_WINS_AT_MOST = 4096
# One round of galloping (two searches, four block copies) costs some 8 us, interleaving some 8 ns an event (measured,
# ordering.md): a round pays when it moves about a thousand events.
GALLOP_PAYS_EVENTS = 1024
WINDOW_EVENTS = 4096  # rows of each side that one interleaving step looks at; doubles while interleaving goes on
# Neighbouring heads are merged together by one stable sort up to this many rows: it finds the runs and gallops over
# them in compiled code, and takes 8 to 27 ns an event for 32 heads of 250,000 rows where merging two by two takes 29 to
# 87 (ordering.md). Beyond it long streaks copied as blocks are as good or better, and the sort needs memory at once.
FUSE_EVENTS = 1 << 18
# With all but so small a part of the rows in one head the stable sort moves it as blocks: 1.3 ns a row against 6.5 of
# packed keys. Where four heads interleave at random it takes 10 and more.
FEW_OTHERS = 16
STREAK_BUCKETS = 24


@dataclass(slots=True)
class MergeCounts:
    """What merging cost, since the feed began. `streaks[k]` counts streaks of 2^k to 2^(k+1)-1 wins."""

    merges: int = 0
    comparisons: int = 0
    copies: int = 0  # rows moved
    gallops: int = 0  # times that galloping was entered
    streaks: list[int] = field(default_factory=lambda: [0] * STREAK_BUCKETS)


def power(first_start: int, first_length: int, second_length: int, total: int) -> int:
    """Power of the boundary between two neighbouring runs: least L for which a multiple of 2^-L lies between middles.

    `first_start` rows stand before the first run; `total` > 0 rows in all. Munro & Wild 2018.
    """
    a = 2 * first_start + first_length
    b = a + first_length + second_length
    result = 0
    while True:
        result += 1
        a *= 2
        b *= 2
        # The middles are a/(2n) and b/(2n); doubled, their whole parts are their next binary digits.
        if a >= 2 * total:
            a -= 2 * total
            b -= 2 * total
        elif b >= 2 * total:
            return result


class Merger:
    """Merges strands; remembers from merge to merge how long a streak must be for galloping to pay."""

    def __init__(self, *, galloping: bool = True, fusing: bool = True) -> None:
        self.galloping, self.fusing = galloping, fusing
        self.wins = GALLOP_WINS
        self.counts = MergeCounts()

    def merge(self, heads: list[Strand]) -> Strand:
        """One ascending strand of all heads (none is empty); of equal times that of the earlier head comes first."""
        parts = self._fused(heads) if self.fusing else heads
        if not parts:
            return Strand(empty_times(), as_rows(empty_refs()))
        total = sum(len(part.times) for part in parts)
        stack: list[tuple[Strand, int]] = []  # strand, power of the boundary to its right
        current, start = parts[0], 0
        for following in parts[1:]:
            boundary = power(start, len(current.times), len(following.times), total)
            while stack and stack[-1][1] > boundary:
                left = stack.pop()[0]
                start -= len(left.times)
                current = self.merge_two(left, current)
            stack.append((current, boundary))
            start += len(current.times)
            current = following
        while stack:
            current = self.merge_two(stack.pop()[0], current)
        return current

    def _fused(self, heads: list[Strand]) -> list[Strand]:
        """Neighbouring small heads, interleaved several at a time."""
        result: list[Strand] = []
        group: list[Strand] = []
        rows = 0
        for head in heads:
            if group and rows + len(head.times) > FUSE_EVENTS:
                result.append(self._interleave(group))
                group, rows = [], 0
            group.append(head)
            rows += len(head.times)
        if group:
            result.append(self._interleave(group))
        return result

    def _interleave(self, heads: list[Strand]) -> Strand:
        """Neighbours merged by one stable sort, which itself finds the runs and merges them."""
        if len(heads) == 1:
            return heads[0]
        self.counts.merges += len(heads) - 1
        bounds = [(int(head.times.item(0)), int(head.times.item(-1))) for head in heads]
        if (turns := _turns(bounds)) is not None:
            return joined([heads[index] for index in turns])
        strand = joined(heads)
        rows = len(strand.times)
        self.counts.comparisons += rows * (len(heads) - 1).bit_length()
        self.counts.copies += rows
        found = None
        if FEW_OTHERS * (rows - max([len(head.times) for head in heads])) >= rows:
            found = packed(strand.times, min(bounds)[0], max([last for _, last in bounds]))
        if found is None:
            order = np.argsort(strand.times, kind="stable")
            found = strand.times[order], order
        return Strand(found[0], strand.refs[found[1]])

    def merge_two(self, older: Strand, newer: Strand) -> Strand:
        """Both as one ascending strand, the older first among equal times."""
        self.counts.merges += 1
        return _PairMerge(self, older, newer).run()


def _turns(bounds: list[tuple[int, int]]) -> list[int] | None:
    """Numbers of heads in order of time if none reaches into another; None if one does. By first and last times."""
    if bounds[0][1] > bounds[1][0] and bounds[1][1] >= bounds[0][0]:  # most often seen at once
        return None
    turns = sorted(range(len(bounds)), key=bounds.__getitem__)
    for one, following in pairwise(turns):
        last, first = bounds[one][1], bounds[following][0]
        if last > first or (last == first and one > following):
            return None
    return turns


def _slice(strand: Strand, start: int, stop: int) -> Strand:
    return Strand(strand.times[start:stop], strand.refs[start:stop])


class _PairMerge:
    """One merge of two neighbours: state shared by its two ways of going on."""

    __slots__ = ("counts", "filled", "merger", "newer", "newer_at", "newer_end", "older", "older_at", "refs", "times")

    def __init__(self, merger: Merger, older: Strand, newer: Strand) -> None:
        self.merger, self.counts = merger, merger.counts
        self.older, self.newer = older, newer
        rows = len(older.times) + len(newer.times)
        self.times, self.refs = np.empty(rows, dtype=np.int64), np.empty(rows, dtype=ROW)
        self.older_at = self.newer_at = self.filled = 0
        self.newer_end = len(newer.times)

    def run(self) -> Strand:
        older_rows = len(self.older.times)
        first, probes = gallop_right(self.older.times, int(self.newer.times[0]))
        self._copy_older(first)
        self.counts.comparisons += probes
        if first < older_rows:
            # What the newer strand holds at or beyond the older one's tail goes to the end untouched.
            self.newer_end = int(np.searchsorted(self.newer.times, self.older.times[-1]))
            self.counts.comparisons += len(self.newer.times).bit_length()
        else:
            self.newer_end = 0
        window = WINDOW_EVENTS
        while self.older_at < older_rows and self.newer_at < self.newer_end:
            streak = self._window(window)
            window *= 2
            if self.merger.galloping and streak >= self.merger.wins:
                self._gallop()
                window = WINDOW_EVENTS
        self._copy_older(older_rows)
        self._copy_newer(len(self.newer.times))
        return Strand(self.times, self.refs)

    def _copy(self, strand: Strand, start: int, stop: int) -> None:
        end = self.filled + stop - start
        self.times[self.filled : end] = strand.times[start:stop]
        self.refs[self.filled : end] = strand.refs[start:stop]
        self.filled = end
        self.counts.copies += stop - start
        self.counts.streaks[min((stop - start).bit_length() - 1, STREAK_BUCKETS - 1)] += 1

    def _copy_older(self, stop: int) -> None:
        if stop > self.older_at:
            self._copy(self.older, self.older_at, stop)
            self.older_at = stop

    def _copy_newer(self, stop: int) -> None:
        if stop > self.newer_at:
            self._copy(self.newer, self.newer_at, stop)
            self.newer_at = stop

    def _window(self, rows: int) -> float:
        """Interleave the next rows of both sides in columns; the mean streak of wins seen."""
        older = _slice(self.older, self.older_at, self.older_at + rows)
        newer = _slice(self.newer, self.newer_at, min(self.newer_at + rows, self.newer_end))
        # Only rows that no later row of the other side can precede are final in this window; ties wait for the older.
        if older.times[-1] <= newer.times[-1]:
            take_older, take_newer = len(older.times), int(np.searchsorted(newer.times, older.times[-1]))
        else:
            take_newer = len(newer.times)
            take_older = int(np.searchsorted(older.times, newer.times[-1], side="right"))
        taken = take_older + take_newer
        times = np.concatenate((older.times[:take_older], newer.times[:take_newer]))
        order = np.argsort(times, kind="stable")
        end = self.filled + taken
        np.take(times, order, out=self.times[self.filled : end])
        refs = np.concatenate((older.refs[:take_older], newer.refs[:take_newer]))
        self.refs[self.filled : end] = refs[order]
        self.filled = end
        self.older_at += take_older
        self.newer_at += take_newer
        self.counts.comparisons += taken
        self.counts.copies += taken
        return self._streaks(order >= take_older)

    def _streaks(self, wins: np.ndarray[tuple[int], np.dtype[np.bool_]]) -> float:
        turns = np.flatnonzero(wins[1:] != wins[:-1])
        lengths = np.diff(turns, prepend=-1, append=len(wins) - 1)
        # frexp's exponent of a whole number is its bit length.
        buckets = np.bincount(np.frexp(lengths)[1] - 1, minlength=STREAK_BUCKETS)
        for index in np.flatnonzero(buckets).tolist():
            self.counts.streaks[min(index, STREAK_BUCKETS - 1)] += int(buckets[index])
        return len(wins) / len(lengths)

    def _gallop(self) -> None:
        """Copy blocks while streaks are long enough to pay; adapt the threshold to what was found."""
        self.counts.gallops += 1
        older, newer = self.older.times, self.newer.times
        while self.older_at < len(older) and self.newer_at < self.newer_end:
            before = self.filled
            place, probes = gallop_right(older, int(newer[self.newer_at]), self.older_at)
            self.counts.comparisons += probes
            self._copy_older(place)
            if self.older_at == len(older):
                return
            place, probes = gallop_left(newer, int(older[self.older_at]), self.newer_at, self.newer_end)
            self.counts.comparisons += probes
            self._copy_newer(place)
            if self.filled - before < GALLOP_PAYS_EVENTS:
                self.merger.wins = min(2 * self.merger.wins, GALLOP_WINS_AT_MOST)
                return
            self.merger.wins = max(GALLOP_WINS, self.merger.wins * 7 // 8)
