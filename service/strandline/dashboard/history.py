"""A feed's last day in bounded memory: one row a second for 15 minutes, 10 s for 4 hours, a minute for 24 hours.

Coarse rows are made by merging finer ones: sums stay sums, least and greatest stay what they are, and of who held the
feed the one stays that did so for most of the rows. Pure: rows in, rows out; who fills them is `sampling`.
Memory: 3,780 rows of 542 bytes, 2.0 MB a feed once a day has passed; the pages of a ring are touched as it fills.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray

from ..core.columns import NO_SOURCE, TIME_MIN
from ..hops import HOPS
from .lateness import COUNTS

SECOND_NS = 1_000_000_000
LEVELS = ((1, 900), (10, 1440), (60, 1440))  # seconds a row, rows
LANES = 12  # sources whose newest event time a row keeps

LAST = ("watermark_ns", "slack_ns")  # as it stood at the end of the step
SINKS = 8  # told apart where they fail; the last place is for all further ones
GREATEST = ("newest_ns", "held", "open_runs", "waiting", "oldest_ns", "failing")
SUMS = ("received", "released", "late", "duplicate", "quarantined", "refused", "lateness")
ROW = np.dtype(
    [
        ("t_ns", "i8"),  # start of the step, arrival clock
        ("watermark_ns", "i8"),
        ("newest_ns", "i8"),
        ("slack_ns", "i8"),
        ("held", "i8"),
        ("open_runs", "i8"),
        ("received", "i8"),
        ("released", "i8"),
        ("late", "i8"),
        ("duplicate", "i8"),
        ("quarantined", "i8"),
        ("refused", "i8"),  # requests, whole
        ("lateness", "i8", COUNTS),
        ("waiting", "i4", len(HOPS)),
        ("oldest_ns", "i8", len(HOPS)),  # age of what waits longest
        ("failing", "?", SINKS),  # in the order of the feed's sinks
        ("lane_newest_ns", "i8", LANES),
        ("lane_source", "u4", LANES),  # NO_SOURCE: the place is empty
        ("hold_source", "u4"),
        ("hold_why", "u1"),
        ("balanced", "?"),
    ]
)
Rows = NDArray[np.void]


def empty_row() -> Rows:
    """A row, rows[1], in which nothing has happened yet."""
    row = np.zeros(1, dtype=ROW)
    row["watermark_ns"] = row["newest_ns"] = row["lane_newest_ns"] = TIME_MIN
    row["lane_source"] = row["hold_source"] = NO_SOURCE
    row["balanced"] = True
    return row


def merged(rows: Rows, starts: NDArray[np.intp]) -> Rows:
    """One row for each group of neighbours; groups begin at `starts`, which ascend from 0. Some 0.2 ms."""
    result = np.zeros(len(starts), dtype=ROW)
    stops = np.concatenate((starts[1:], [len(rows)]))
    result["t_ns"] = rows["t_ns"][starts]
    for name in LAST:
        result[name] = rows[name][stops - 1]
    for name in GREATEST:
        result[name] = np.maximum.reduceat(rows[name], starts, axis=0)
    for name in SUMS:
        result[name] = np.add.reduceat(rows[name], starts, axis=0)
    result["balanced"] = np.logical_and.reduceat(rows["balanced"], starts)
    group = np.repeat(np.arange(len(starts)), stops - starts)
    _merge_holds(rows, group, result)
    _merge_lanes(rows, group, result)
    return result


def _merge_holds(rows: Rows, group: NDArray[np.intp], result: Rows) -> None:
    """Of each group the hold of most rows; of equally many the one that came last."""
    keys = (rows["hold_why"].astype(np.int64) << 32) | rows["hold_source"]
    order = np.lexsort((keys, group))  # stable: within a key the last row is the last one
    groups, keys = group[order], keys[order]
    first = np.flatnonzero(np.concatenate(([True], (keys[1:] != keys[:-1]) | (groups[1:] != groups[:-1]))))
    counts = np.diff(np.concatenate((first, [len(keys)])))
    last = order[first + counts - 1]
    best = np.lexsort((last, counts, groups[first]))
    ends = np.flatnonzero(np.concatenate((groups[first][best][1:] != groups[first][best][:-1], [True])))
    chosen = last[best[ends]]
    result["hold_why"], result["hold_source"] = rows["hold_why"][chosen], rows["hold_source"][chosen]


def _merge_lanes(rows: Rows, group: NDArray[np.intp], result: Rows) -> None:
    """Of each group the LANES sources that were in most rows, with their greatest newest time."""
    result["lane_source"], result["lane_newest_ns"] = NO_SOURCE, TIME_MIN
    sources = rows["lane_source"].ravel()
    used = np.flatnonzero(sources != NO_SOURCE)
    if not len(used):
        return
    keys = (np.repeat(group, LANES)[used].astype(np.int64) << 32) | sources[used]
    order = np.argsort(keys, kind="stable")
    keys, newest = keys[order], rows["lane_newest_ns"].ravel()[used][order]
    first = starts_of(keys)
    counts = np.diff(np.concatenate((first, [len(keys)])))
    keys, greatest = keys[first], np.maximum.reduceat(newest, first)
    groups = keys >> 32
    best = np.lexsort((keys, -counts, groups))
    groups = groups[best]
    begins = starts_of(groups)
    rank = np.arange(len(best)) - np.repeat(begins, np.diff(np.concatenate((begins, [len(best)]))))
    kept = rank < LANES
    result["lane_source"][groups[kept], rank[kept]] = (keys[best] & NO_SOURCE)[kept]
    result["lane_newest_ns"][groups[kept], rank[kept]] = greatest[best][kept]


def starts_of(groups: NDArray[np.int64]) -> NDArray[np.intp]:
    """Where a group of equal neighbours begins."""
    return np.flatnonzero(np.concatenate(([True], groups[1:] != groups[:-1])))


class Ring:
    """The last rows of one level."""

    def __init__(self, capacity: int) -> None:
        self._rows: Rows = np.zeros(capacity, dtype=ROW)
        self._next = self.count = 0

    def add(self, row: Rows) -> None:
        """Keep one more row; the oldest goes where there is no room."""
        self._rows[self._next] = row[0]
        self._next = (self._next + 1) % len(self._rows)
        self.count = min(self.count + 1, len(self._rows))

    def add_again(self, row: Rows, t_ns: NDArray[np.int64]) -> None:
        """Keep one row (rows[1]) as often as there are instants, each with its own."""
        if not len(t_ns):
            return
        kept = t_ns[-len(self._rows) :]
        self._next = (self._next + len(t_ns) - len(kept)) % len(self._rows)
        places = np.arange(self._next, self._next + len(kept)) % len(self._rows)
        self._rows[places] = row
        self._rows["t_ns"][places] = kept
        self._next = (self._next + len(kept)) % len(self._rows)
        self.count = min(self.count + len(t_ns), len(self._rows))

    def replace_last(self, row: Rows) -> None:
        """Put a row in the place of the newest."""
        self._rows[self._next - 1] = row[0]

    @property
    def is_full(self) -> bool:
        """Whether older rows have gone."""
        return self.count == len(self._rows)

    @property
    def begins_ns(self) -> int:
        """When the oldest row begins; there must be one."""
        return int(self._rows["t_ns"][self._next - self.count])

    def last(self, count: int) -> Rows:
        """The newest rows, at most so many, oldest first (a copy)."""
        places = np.arange(self._next - min(count, self.count), self._next) % len(self._rows)
        return self._rows[places]

    def since(self, t_ns: int) -> Rows:
        """The rows that begin at or after this instant, oldest first (a copy)."""
        rows = self.last(self.count)
        return rows[int(np.searchsorted(rows["t_ns"], t_ns)) :]


class History:
    """The levels of one feed."""

    def __init__(self, levels: tuple[tuple[int, int], ...] = LEVELS) -> None:
        self._steps_ns = [step * SECOND_NS for step, _ in levels]
        self._rings = [Ring(capacity) for _, capacity in levels]
        self._last_ns: int | None = None  # start of the newest row of the finest level
        # What was merged last into a row of each level, and the row. While nothing happens it is the same again, and a
        # tenth as dear as merging: with 100 feeds that rest, 0.2 % of a core.
        self._merged: list[tuple[bytes, Rows] | None] = [None] * len(levels)

    def add(self, row: Rows) -> None:
        """One sample (rows[1]; its `t_ns` is the arrival clock). Two in one step become one row."""
        step_ns = self._steps_ns[0]
        t_ns = int(row["t_ns"][0]) // step_ns * step_ns
        if self._last_ns is not None and t_ns <= self._last_ns:
            both = np.concatenate((self._rings[0].last(1), row))
            self._rings[0].replace_last(merged(both, np.zeros(1, dtype=np.intp)))
            return
        if self._last_ns is not None:
            self._roll(t_ns, self._last_ns)
        row["t_ns"] = t_ns
        self._rings[0].add(row)
        self._last_ns = t_ns

    def add_again(self, row: Rows, instants: Sequence[int]) -> None:
        """As `add` of the same row at each of these instants, a step of the next level at a time."""
        if not instants:
            return
        step_ns = self._steps_ns[0]
        t_ns = np.array(instants, dtype=np.int64) // step_ns * step_ns
        if self._last_ns is not None:
            t_ns = np.concatenate(([self._last_ns], t_ns))
        if np.any(t_ns[1:] <= t_ns[:-1]):  # two in one step are merged, and a clock may have stepped back
            for instant in instants:
                self._add_at(row, instant)
            return
        t_ns = t_ns[len(t_ns) - len(instants) :]
        coarse_ns = self._steps_ns[1] if len(self._steps_ns) > 1 else step_ns
        starts = starts_of(t_ns // coarse_ns).tolist()
        for start, stop in zip(starts, [*starts[1:], len(t_ns)], strict=True):
            self._add_at(row, int(t_ns[start]))  # makes coarse rows of what is over by then; behind it nothing is
            self._rings[0].add_again(row, t_ns[start + 1 : stop])
            self._last_ns = int(t_ns[stop - 1])

    def _add_at(self, row: Rows, instant: int) -> None:
        row = row.copy()
        row["t_ns"] = instant
        self.add(row)

    def _roll(self, t_ns: int, before_ns: int) -> None:
        """Make coarse rows of the steps that are over."""
        for level in range(1, len(self._rings)):
            step_ns = self._steps_ns[level]
            begin_ns = before_ns // step_ns * step_ns
            if t_ns // step_ns * step_ns == begin_ns:
                return
            self._rings[level].add(self._rolled(level, self._part(level - 1, step_ns, begin_ns), begin_ns))

    def _rolled(self, level: int, rows: Rows, begin_ns: int) -> Rows:
        """As `_one`; only the instants of the rows do not matter."""
        rows["t_ns"] = 0
        known, content = self._merged[level], rows.tobytes()
        if known is None or known[0] != content:
            known = self._merged[level] = content, self._one(rows, begin_ns)
        known[1]["t_ns"] = begin_ns
        return known[1]

    def _part(self, level: int, step_ns: int, begin_ns: int) -> Rows:
        """The finer rows since an instant, as a copy."""
        rows = self._rings[level].last(step_ns // self._steps_ns[level])
        return rows[rows["t_ns"] >= begin_ns]

    @staticmethod
    def _one(rows: Rows, begin_ns: int) -> Rows:
        row = merged(rows, np.zeros(1, dtype=np.intp))
        row["t_ns"] = begin_ns
        return row

    def newest(self, count: int) -> Rows:
        """The newest rows of the finest level, at most so many, oldest first."""
        return self._rings[0].last(count)

    def rows(self, level: int) -> Rows:
        """All rows of a level, oldest first; the last one is of the step that is not over yet."""
        rows = self._rings[level].last(self._rings[level].count)
        if not level or self._last_ns is None:
            return rows
        step_ns = self._steps_ns[level]
        begin_ns = self._last_ns // step_ns * step_ns
        finer = self.rows(level - 1)
        return np.concatenate((rows, self._one(finer[finer["t_ns"] >= begin_ns], begin_ns)))

    def window(self, from_ns: int, to_ns: int, points: int) -> tuple[int, Rows]:
        """The step in seconds and the rows that begin from `from_ns` to `to_ns`, in at most `points` (2 or more) steps.

        The finest level is taken that goes back so far; its rows are merged as far as needed.
        """
        level = self._level(from_ns)
        step_ns, rows = self._steps_ns[level], self.rows(level)
        t_ns = rows["t_ns"]
        rows = rows[(t_ns >= from_ns // step_ns * step_ns) & (t_ns <= to_ns)]
        if not len(rows):
            return step_ns // SECOND_NS, rows
        factor, groups = 1, rows["t_ns"] // step_ns
        starts = starts_of(groups)
        while len(starts) > points:  # more than once where steps are missing, or cut by the window's ends
            factor += 1 + factor // 8 + (len(starts) - points) * factor // (2 * points)
            groups = rows["t_ns"] // (step_ns * factor)
            starts = starts_of(groups)
        result = rows if factor == 1 else merged(rows, starts)
        result["t_ns"] = groups[starts] * (step_ns * factor)
        return step_ns * factor // SECOND_NS, result

    def tail(self, from_ns: int) -> tuple[int, Rows]:
        """The step in ns, and all rows from the step of `from_ns` on, of the finest level that goes back so far."""
        level = self._level(from_ns)
        step_ns, rows = self._steps_ns[level], self.rows(level)
        return step_ns, rows[rows["t_ns"] >= from_ns // step_ns * step_ns]

    def _level(self, from_ns: int) -> int:
        """The finest level that goes back so far, else the coarsest."""
        reaching = (level for level, ring in enumerate(self._rings) if not ring.is_full or ring.begins_ns <= from_ns)
        return next(reaching, len(self._rings) - 1)

    @property
    def bytes_at_most(self) -> int:
        """Memory that the rows can take."""
        return sum(ring._rows.nbytes for ring in self._rings)

    def check(self) -> None:
        """Assert that steps ascend in every level and start at multiples of the step."""
        for step_ns, ring in zip(self._steps_ns, self._rings, strict=True):
            t_ns: NDArray[Any] = ring.last(ring.count)["t_ns"]
            assert np.all(t_ns[1:] > t_ns[:-1]) and not np.any(t_ns % step_ns)
            assert not ring.count or ring.begins_ns == t_ns[0]
