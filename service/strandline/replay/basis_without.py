"""A basis as it would stand without one of the sources, for several sources over the same blocks.

For the least over the sources nothing is followed anew: what a source leaves behind differs only at the points where
its own word was the least one. Only there is the least over the others looked for. So leaving out costs some 30 ns a
word and source, and once more what the basis costs, shared by all of them; a basis of its own for each took 150 ns.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from typing import NamedTuple, Protocol

import numpy as np
from numpy.typing import NDArray

from .basis import NO_BASIS, NONE, Basis, Course, LeastOfSources, Moves, Requests, least_covering

Int64s = NDArray[np.int64]


class Stood(NamedTuple):
    """Where a basis stood before and after each request of a block, its own requests of the left-out source included.

    `others`: the requests in which somebody else spoke.
    """

    before: Int64s
    after: Int64s
    others: NDArray[np.bool_]


class Leaving(Protocol):
    """Follows a feed block by block, whole and without each of some sources."""

    def add(self, words: Requests) -> tuple[Moves, list[Stood]]:
        """The next block, as `basis.said` shortens it."""


def leaving(begin: Callable[[], Basis], sources: Sequence[int]) -> Leaving:
    """What follows the basis that `begin` makes."""
    basis = begin()
    if isinstance(basis, LeastOfSources):
        return LeastWithout(basis, sources)
    return EachWithout(basis, sources, [begin() for _ in sources])


class LeastWithout:
    """The least over the sources, and over all but one."""

    def __init__(self, basis: LeastOfSources, sources: Sequence[int]) -> None:
        self._whole, self._sources = basis, sources
        self._basis = [NO_BASIS] * len(sources)
        self._newest_ns = [NO_BASIS] * len(sources)  # over all others

    def add(self, words: Requests) -> tuple[Moves, list[Stood]]:
        """Costs 100 ns a word, and 30 more for each source."""
        course = self._whole.course(words)
        moves = self._whole.follow(words, course)
        return moves, [self._without(place, words, course) for place in range(len(self._sources))]

    def _without(self, place: int, words: Requests, course: Course) -> Stood:
        source = self._sources[place]
        assert words.sources is not None
        own = words.sources == source
        least = _least_without(course, source)
        points = np.maximum.accumulate(least)
        if points[-1] == NONE:  # somewhere nobody else counts: there the newest over all others leads
            times = Requests(np.where(own, NO_BASIS, words.times), words.starts, words.instants)
            newest = np.full(course.length, NO_BASIS, dtype=np.int64)
            newest[course.own] = times.newest()
            newest = np.maximum(np.maximum.accumulate(newest), self._newest_ns[place])
            points = np.maximum.accumulate(np.where(least == NONE, newest, least))
        np.maximum(points, self._basis[place], out=points)
        newest_ns = int(words.times.max(where=~own, initial=NO_BASIS))
        self._newest_ns[place] = max(self._newest_ns[place], newest_ns)
        earlier = np.concatenate(([self._basis[place]], points[:-1]))
        self._basis[place] = int(points[-1])
        return Stood(earlier[course.own], points[course.own], _somebody(~own, words))


def _least_without(course: Course, source: int) -> Int64s:
    """The least at each point over the words of all other sources."""
    mine = course.sources == source
    begins, spans = course.begins[mine], np.maximum(course.ends[mine] - course.begins[mine], 0)
    points = np.arange(int(spans.sum())) + np.repeat(begins - (np.cumsum(spans) - spans), spans)
    held = points[np.repeat(course.newest[mine], spans) == course.least[points]]
    if not len(held):
        return course.least
    # The points that it held, pushed together: words of others that reach none of them shrink to nothing.
    among = np.zeros(course.length + 1, dtype=np.int64)
    among[held + 1] = 1
    np.cumsum(among, out=among)
    first, last = among[course.begins], among[course.ends]
    reaching = np.flatnonzero((last > first) & ~mine)
    least = course.least.copy()
    least[held] = least_covering(first[reaching], last[reaching], course.newest[reaching], len(held))
    return least


class EachWithout:
    """Any basis, with one of its own for each source: those that ask for no sources take some 3 ns a row."""

    def __init__(self, basis: Basis, sources: Sequence[int], without: Sequence[Basis]) -> None:
        self._whole, self._sources, self._without = basis, sources, without
        self._basis = [NO_BASIS] * len(sources)

    def add(self, words: Requests) -> tuple[Moves, list[Stood]]:
        """The next block."""
        return self._whole.add(words), [self._one(place, words) for place in range(len(self._sources))]

    def _one(self, place: int, words: Requests) -> Stood:
        assert words.sources is not None
        rows = words.sources != self._sources[place]
        others = _somebody(rows, words)
        kept, stood = np.flatnonzero(others), self._basis[place]
        after = np.full(len(words.starts), stood, dtype=np.int64)
        before = after.copy()
        if len(kept):
            counts = np.add.reduceat(rows.astype(np.int64), words.starts)[kept]
            starts = np.cumsum(counts) - counts
            moves = self._without[place].add(Requests(words.times[rows], starts, words.instants[kept]))
            after = np.append(stood, moves.after)[np.cumsum(others)]
            before = np.append(stood, after[:-1])
            before[kept] = moves.before
            self._basis[place] = int(after[-1])
        return Stood(before, after, others)


def _somebody(rows: NDArray[np.bool_], words: Requests) -> NDArray[np.bool_]:
    """The requests that hold some of these rows."""
    if len(words.starts) == len(words.times):
        return rows
    found: NDArray[np.bool_] = np.logical_or.reduceat(rows, words.starts)
    return found
