"""The rows that leave next: all that is held at or before a bound, as a few sorted strands and what came since.

Where the bound lies, and what is held beyond it, is said in `held.py`. No watermark is decided here.
"""

from __future__ import annotations

import numpy as np

from .columns import TIME_MAX, Times
from .fresh import Fresh
from .merge import Merger
from .runs import Strand, joined, owned, rest_of, runs_of

# More strands than this are joined: each costs a mark some 3 us if it has rows for it. A strand, save for the last but
# one, is joined with at least as many rows as it has, so each row is moved a few times however small the arrivals are.
STRANDS_AT_MOST = 6
RESORTED_EVENTS, RESORTED_TIMES = 2048, 16  # up to so many rows, at most so many times what is fresh, are sorted anew
RESORTED_FRESH = 2  # and any number of them, if what is fresh is so many times as much
SAMPLES = 64  # of each strand, to say which time divides the rows as wished


class Near:
    """Sorted strands in order of age; the rows of `fresh` came after all of theirs."""

    def __init__(self, merger: Merger) -> None:
        self.strands: list[Strand] = []
        self.fresh = Fresh()
        self.comparisons = 0
        self._merger = merger

    @property
    def rows(self) -> int:
        """Events held here."""
        return self._sorted_rows + self.fresh.rows

    @property
    def _sorted_rows(self) -> int:
        return sum([len(strand.times) for strand in self.strands])

    @property
    def least(self) -> int:
        """Least event time; TIME_MAX without rows."""
        return min([self.fresh.least, *[strand.times.item(0) for strand in self.strands]])

    @property
    def greatest(self) -> int:
        """Greatest event time; of no meaning without rows."""
        greatest = [int(strand.times.item(-1)) for strand in self.strands]
        return max([*greatest, self.fresh.greatest] if self.fresh.rows else greatest, default=TIME_MAX)

    def put(self, strand: Strand) -> None:
        """Hold a sorted strand; it is younger than all that is here, or has no time in common with it."""
        if len(strand.times):
            self.strands.append(strand)

    def settle(self) -> None:
        """What is fresh becomes sorted strands, the youngest ones."""
        fresh = self.fresh.rows
        if not fresh:
            return
        if self.strands and self._is_sorted_anew(fresh):
            rows = self.fresh.take(self.strands)
            self.strands = []
        else:
            rows = self.fresh.take()
        for run in runs_of(*rows):
            self.put(owned(run))
        while len(self.strands) > STRANDS_AT_MOST:
            self._join_youngest()

    def _is_sorted_anew(self, fresh: int) -> bool:
        """Whether one sort of all rows costs less than one of so many fresh ones and a merge of what leaves then."""
        return self.rows <= min(RESORTED_EVENTS, RESORTED_TIMES * fresh) or RESORTED_FRESH * self._sorted_rows <= fresh

    def _join_youngest(self) -> None:
        """Join the two youngest strands, and each older one that is no longer than what is joined with it."""
        first = len(self.strands) - 2
        rows = sum(len(strand.times) for strand in self.strands[first:])
        while first and len(self.strands[first - 1].times) <= rows:
            first -= 1
            rows += len(self.strands[first].times)
        self.strands[first:] = [self._merger.merge(self.strands[first:])]

    def cut(self, watermark: int) -> list[Strand]:
        """Take the rows at or before the watermark: sorted strands in order of age."""
        if self.fresh.least <= watermark:
            self.settle()
        heads: list[Strand] = []
        stay: list[Strand] = []
        for strand in self.strands:
            times, refs = strand
            if times.item(0) > watermark:
                stay.append(strand)
                continue
            place = int(times.searchsorted(watermark, side="right"))
            rows = len(times)
            self.comparisons += rows.bit_length()
            if place == rows:
                heads.append(strand)
            else:
                heads.append(Strand(times[:place], refs[:place]))
                stay.append(rest_of(strand, place))
        self.strands = stay
        return heads

    def cut_beyond(self, rows: int) -> tuple[int, Strand]:
        """Keep about so many rows, the first in time: a bound that the others lie beyond, and these in ascending time.

        Never twice as many: where equal times forbid that, all of those lie beyond. Not all rows are kept.
        """
        self.settle()
        bound = min(self._divider(rows), self.greatest - 1)
        if self.least <= bound and self._count(bound) > 2 * rows:
            bound -= 1
        within, strands = self.cut(bound), self.strands
        self.strands = []
        for strand in within:
            self.put(owned(strand))
        return bound, self._merger.merge(strands)

    def _count(self, bound: int) -> int:
        """How many rows of the strands lie at or before a bound."""
        return sum(int(strand.times.searchsorted(bound, side="right")) for strand in self.strands)

    def _divider(self, rows: int) -> int:
        """A time that has about so many of the rows at or before it. Nothing may be fresh."""
        times: list[Times] = []
        weights: list[int] = []
        for strand in self.strands:
            step = -(-len(strand.times) // SAMPLES)
            times.append(strand.times[::step])
            weights += [step] * len(times[-1])
        every = np.concatenate(times)
        order = np.argsort(every, kind="stable")
        place = int(np.cumsum(np.array(weights)[order]).searchsorted(rows))
        return int(every[order[min(place, len(order) - 1)]])

    def copied(self) -> Strand:
        """All rows; of equal times the one that came first is first. What becomes of them later does not change it."""
        return joined([*self.strands, self.fresh.copied()])

    def check(self) -> None:
        """Assert that strands ascend and none is empty."""
        self.fresh.check()
        for times, refs in self.strands:
            assert len(times) == len(refs) > 0 and np.all(times[1:] >= times[:-1])
