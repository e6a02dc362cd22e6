"""Gaps in the sequence numbers of each source: what came late, and what never came and was lost upstream.

A gap opens when a number comes that is greater than the next one expected of its source: the numbers between are
missing. Those that come later fill it; those that do not by the end of what is looked at are lost, before they reached
us. A source that starts its count over looks as if it came late from then on: give what came since as a source of its
own.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from .disorder import rows_by_group
from .reordering import KEY_GREATEST, KEY_LEAST

Int64s = NDArray[np.int64]

NEVER = -1  # in a column of rows


@dataclass(frozen=True, slots=True)
class Gaps:
    """Gaps as columns, in the order in which they opened. Rows count from 0 among the rows given."""

    source: Int64s
    first: Int64s  # the first number that was missing
    last: Int64s  # the last one
    opened: Int64s  # row of the arrival that jumped
    filled: Int64s  # numbers that came later
    lost: Int64s  # numbers that never came
    filled_by: Int64s  # row of the last arrival that filled some of it; NEVER

    def __len__(self) -> int:
        return len(self.source)


@dataclass(frozen=True, slots=True)
class SourceCounts:
    """Counts as columns, by source number; received = in order + late + before_first + duplicates."""

    received: Int64s
    in_order: Int64s
    late: Int64s  # filled a gap
    before_first: Int64s  # smaller than the first number that was heard of the source
    duplicates: Int64s
    lost: Int64s
    gaps: Int64s


@dataclass(frozen=True, slots=True)
class Lost:
    """Stretches of numbers that never came, as columns, by source and number."""

    source: Int64s
    first: Int64s
    last: Int64s
    opened: Int64s  # row of the arrival that jumped over them

    def __len__(self) -> int:
        return len(self.source)


@dataclass(frozen=True, slots=True)
class Lifted:
    """Numbers of all sources as one sequence of keys: source by source, of each the first copies as they came.

    Keys of a source are greater than all of the sources before it, so what is reordered within a source is reordered
    here, by as much, and nothing else is. `rows` leads back to the rows given.
    """

    keys: Int64s
    rows: Int64s


def sequence_gaps(numbers: Int64s, sources: NDArray[np.uint32] | None = None) -> tuple[Gaps, SourceCounts]:
    """Gaps and counts of sequence numbers in order of arrival; without `sources` all are of source 0.

    Costs some 200 ns a row. Raises ValueError for columns of different lengths, numbers beyond 2^62 or sources beyond
    2^24.
    """
    by_source = _by_source(numbers, sources)
    if not len(numbers):
        return Gaps(*np.empty((7, 0), dtype=np.int64)), SourceCounts(*np.empty((7, 0), dtype=np.int64))
    ranks, first_rows = _ranked(numbers, by_source)
    values = numbers[first_rows]

    # From here on in order of source and row. Ranks of a source are greater than all of the sources before it.
    rows = rows_by_group(by_source)
    owner, rank = by_source[rows], ranks[rows]
    fresh = np.concatenate(([True], owner[1:] != owner[:-1]))
    newest = np.maximum.accumulate(rank)
    before = np.where(fresh, rank - 1, np.concatenate(([-1], newest[:-1])))
    is_first = first_rows[rank] == rows
    jumps = np.flatnonzero(~fresh & (rank > before))
    jumps = jumps[values[rank[jumps]] - values[before[jumps]] > 1]
    gaps = _gaps(values, first_rows, rows[jumps], owner[jumps], before[jumps], rank[jumps])
    heads = np.flatnonzero(fresh)
    head_rank = np.repeat(rank[heads], np.diff(heads, append=len(rows)))
    behind = is_first & (rank < before)
    kinds = (~is_first, is_first & (rank > before), behind & (rank < head_rank), behind & (rank > head_rank))
    count = int(owner[-1]) + 1
    duplicates, in_order, early, late = (np.bincount(owner[kind], minlength=count) for kind in kinds)
    lost = np.zeros(count, dtype=np.int64)
    np.add.at(lost, gaps.source, gaps.lost)
    received, opened = np.bincount(owner, minlength=count), np.bincount(gaps.source, minlength=count)
    return gaps, SourceCounts(received, in_order, late, early, duplicates, lost, opened)


def lifted(numbers: Int64s, sources: NDArray[np.uint32] | None = None) -> Lifted:
    """The numbers of all sources as one sequence. Raises as `sequence_gaps`."""
    by_source = _by_source(numbers, sources)
    if not len(numbers):
        return Lifted(*np.empty((2, 0), dtype=np.int64))
    ranks, first_rows = _ranked(numbers, by_source)
    return _lifted(ranks, first_rows, by_source)


def lost_ranges(numbers: Int64s, sources: NDArray[np.uint32] | None = None) -> Lost:
    """The stretches that never came, of gaps that opened: together as many as `SourceCounts.lost`.

    Raises as `sequence_gaps`.
    """
    by_source = _by_source(numbers, sources)
    if not len(numbers):
        return Lost(*np.empty((4, 0), dtype=np.int64))
    ranks, first_rows = _ranked(numbers, by_source)
    values, owner = numbers[first_rows], by_source[first_rows]
    low = np.flatnonzero((owner[1:] == owner[:-1]) & (values[1:] - values[:-1] > 1))
    whole = _lifted(ranks, first_rows, by_source)
    # Nothing jumped over what lies below the first number heard of a source.
    groups = np.concatenate(([0], np.flatnonzero(owner[1:] != owner[:-1]) + 1))
    group = np.searchsorted(groups, low, side="right") - 1
    low = low[low >= whole.keys[groups][group]]
    opened = whole.rows[np.searchsorted(np.maximum.accumulate(whole.keys), low, side="right")]
    return Lost(owner[low], values[low] + 1, values[low + 1] - 1, opened)


def _by_source(numbers: Int64s, sources: NDArray[np.uint32] | None) -> Int64s:
    if sources is not None and len(sources) != len(numbers):
        raise ValueError(f"{len(sources)} sources for {len(numbers)} numbers")
    if len(numbers) and not (numbers.min() >= KEY_LEAST and numbers.max() <= KEY_GREATEST):
        raise ValueError("sequence numbers must lie between -2^62 and 2^62")
    return np.zeros(len(numbers), dtype=np.int64) if sources is None else sources.astype(np.int64)


def _lifted(ranks: Int64s, first_rows: Int64s, by_source: Int64s) -> Lifted:
    rows = rows_by_group(by_source)
    rows = rows[first_rows[ranks[rows]] == rows]
    return Lifted(ranks[rows], rows)


def _ranked(numbers: Int64s, by_source: Int64s) -> tuple[Int64s, Int64s]:
    """For each row the rank of its number, by source and then by number; for each rank the row of its first copy."""
    order = np.argsort(numbers, kind="stable")
    order = order[rows_by_group(by_source[order])]
    number, owner = numbers[order], by_source[order]
    other = np.concatenate(([True], (number[1:] != number[:-1]) | (owner[1:] != owner[:-1])))
    ranks = np.empty(len(numbers), dtype=np.int64)
    ranks[order] = np.cumsum(other) - 1
    return ranks, order[other]


def _gaps(values: Int64s, first_rows: Int64s, opened: Int64s, source: Int64s, low: Int64s, high: Int64s) -> Gaps:
    """Gaps between the ranks `low` and `high`: the ranks between them are the numbers that came after all."""
    filled = high - low - 1
    filled_by = np.full(len(opened), NEVER, dtype=np.int64)
    some = np.flatnonzero(filled)
    if len(some):
        # The last row over the ranks from low + 1 to high - 1: bounds in pairs, every other stretch is of no interest.
        bounds = np.column_stack((low[some] + 1, high[some])).ravel()
        order = np.argsort(bounds[::2], kind="stable")
        pairs = bounds.reshape(-1, 2)[order].ravel()
        filled_by[some[order]] = np.maximum.reduceat(first_rows, pairs)[::2]
    first, last = values[low] + 1, values[high] - 1
    sort = np.argsort(opened)
    columns = source, first, last, opened, filled, last - first + 1 - filled, filled_by
    return Gaps(*(column[sort] for column in columns))
