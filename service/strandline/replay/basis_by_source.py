"""How late each event comes behind its own source's newest one, over a block of arrivals at once: `order = "source"`.

The rule is the one of `core/own.py` without its bound on holding, excuses and promises: a source's watermark stands a
slack behind its newest event, or at that event once it has been silent for `idle_after`, and never goes back. So an
event from before such a silence is late with every slack (NEVER_ON_TIME). State is carried from block to block, by
source number; slacks are not known here.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from .basis import NO_BASIS, TIME_GREATEST, Int64s, Requests, grouped_greatest, said
from .disorder import rows_by_group

NEVER_ON_TIME = 2**62


@dataclass(frozen=True, slots=True)
class Words:
    """What sources said in a block: a row for each source and request, by source, then as they came.

    `newest` is the source's newest time with this word, `heard` the instant of its word before (TIME_GREATEST: none).
    `begins` are the first rows of each source. `lateness` and `of` have a value for each row of the block: how late it
    is, and its word. `last_heard` is by source number, after the block.
    """

    sources: Int64s
    instants: Int64s
    newest: Int64s
    heard: Int64s
    begins: Int64s
    lateness: Int64s
    of: Int64s
    last_heard: Int64s


class NewestOfEach:
    """Follows every source by itself. `idle_after_ns` None: no source ever falls idle."""

    def __init__(self, idle_after_ns: int | None = None) -> None:
        self.idle_after_ns = idle_after_ns
        self._newest = np.full(0, NO_BASIS, dtype=np.int64)
        self._heard = np.full(0, TIME_GREATEST, dtype=np.int64)
        self._floor = np.full(0, NO_BASIS, dtype=np.int64)  # newest event when the source last fell idle

    def add(self, block: Requests) -> Words:
        """Take note of the next block (at least one row). Costs 30 to 100 ns an event."""
        if block.sources is None:
            raise ValueError("what is late behind its own source needs a column of sources")
        stretches = said(block)
        assert stretches.sources is not None
        order = rows_by_group(stretches.sources)
        numbers = stretches.sources[order].astype(np.int64)
        self._reach(int(numbers[-1]) + 1)
        shortened = len(stretches.starts) < len(order)
        request = np.searchsorted(stretches.starts, order, side="right") - 1 if shortened else order
        begins = np.empty(len(order), dtype=np.bool_)
        begins[0] = True
        begins[1:] = (numbers[1:] != numbers[:-1]) | (request[1:] != request[:-1])
        heads = np.flatnonzero(begins)
        greatest = np.maximum.reduceat(stretches.times[order], heads)
        sources, instants = numbers[heads], block.instants[request[heads]]
        fresh = np.concatenate(([True], sources[1:] != sources[:-1]))
        newest = np.maximum(grouped_greatest(greatest, fresh), self._newest[sources])
        before = np.where(fresh, self._newest[sources], np.concatenate((newest[:1], newest[:-1])))
        heard = np.where(fresh, self._heard[sources], np.concatenate((instants[:1], instants[:-1])))
        floor = self._floors(sources, instants, heard, before, fresh)
        lasts = np.append(np.flatnonzero(fresh)[1:], len(sources)) - 1
        for column, values in ((self._newest, newest), (self._heard, instants), (self._floor, floor)):
            column[sources[lasts]] = values[lasts]
        of = np.empty(len(order), dtype=np.int64)
        of[order] = np.cumsum(begins) - 1
        of = _by_row(block, stretches, of)
        lateness = np.maximum(before[of] - block.times, 0)
        if self.idle_after_ns is not None:
            lateness[block.times < floor[of]] = NEVER_ON_TIME
        return Words(sources, instants, newest, heard, np.flatnonzero(fresh), lateness, of, self._heard)

    def _reach(self, count: int) -> None:
        more = count - len(self._newest)
        if more > 0:
            more = max(more, len(self._newest))
            self._newest = np.concatenate((self._newest, np.full(more, NO_BASIS)))
            self._heard = np.concatenate((self._heard, np.full(more, TIME_GREATEST)))
            self._floor = np.concatenate((self._floor, np.full(more, NO_BASIS)))

    def _floors(
        self, sources: Int64s, instants: Int64s, heard: Int64s, before: Int64s, fresh: NDArray[np.bool_]
    ) -> Int64s:
        """Behind which each word's events are late with every slack: the newest event before the last silence."""
        if self.idle_after_ns is None:
            return before
        idle = instants - heard >= self.idle_after_ns
        if not idle.any():
            return self._floor[sources]
        fallen = np.where(idle, before, NO_BASIS)
        return np.maximum(grouped_greatest(fallen, fresh), self._floor[sources])


def _by_row(block: Requests, stretches: Requests, column: Int64s) -> Int64s:
    """A column with a value for each stretch of rows (as `said` has them) as one with a value for each row."""
    rows = len(block.times)
    if len(column) == rows:
        return column
    assert block.sources is not None
    begins = np.zeros(rows, dtype=np.bool_)
    begins[block.starts] = True
    begins[1:] |= block.sources[1:] != block.sources[:-1]
    return np.repeat(column, np.diff(np.flatnonzero(begins), append=rows))
