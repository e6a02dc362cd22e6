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

from strandline.core.columns import grown

from .basis import NO_BASIS, TIME_GREATEST, Int64s, Requests, grouped_greatest, heads_of, said_by_source

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
        stretches, order, numbers, request = said_by_source(block)
        self._reach(int(numbers[-1]) + 1)
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
        if len(of) < len(block.times):  # a value for each stretch of rows: one for each row
            of = np.repeat(of, np.diff(heads_of(block), append=len(block.times)))
        lateness = np.maximum(before[of] - block.times, 0)
        if self.idle_after_ns is not None:
            lateness[block.times < floor[of]] = NEVER_ON_TIME
        return Words(sources, instants, newest, heard, np.flatnonzero(fresh), lateness, of, self._heard)

    def _reach(self, count: int) -> None:
        if count > len(self._newest):
            size = max(count, 2 * len(self._newest))
            self._newest = grown(self._newest, size, NO_BASIS)
            self._heard = grown(self._heard, size, TIME_GREATEST)
            self._floor = grown(self._floor, size, NO_BASIS)

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
