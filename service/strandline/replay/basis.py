"""The basis of a watermark: what it stands a slack behind, request by request, over a block of arrivals at once.

Three of them: the newest event time over all sources, the arrival clock, and the least over the sources of their newest
event times. A basis never goes back, and it does not depend on the slack: the watermark of slack S is basis - S. So one
pass serves every slack. State is carried from block to block; slacks and held events are not known here.

The rule is the one of `core/watermark.py` (without its bound on holding, excuses and promises, which are an
operator's): a source counts from its first event until it has been silent for `idle_after_ns`, and again when it
speaks; where nobody counts, the newest over all leads. A source falls idle at an instant between arrivals: that is a
step of its own.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, Protocol

import numpy as np
from numpy.typing import NDArray

from strandline.core.columns import grown

from .disorder import rows_by_group

Int64s = NDArray[np.int64]

# Times are held within this: then differences of two, give or take a slack of up to 2^61 ns, stay within int64.
TIME_LEAST, TIME_GREATEST = -(2**62) + 1, 2**62 - 1  # 1823-11-12 and 2116-02-20
NO_BASIS = TIME_LEAST  # before anything came
NONE = 2**63 - 1


@dataclass(frozen=True, slots=True)
class Requests:
    """A block of arrivals as columns. Rows are events in order of arrival; a request is one or more rows.

    `times` and `sources` have a value a row, `starts` the first row of each request (strictly ascending, from 0) and
    `instants` the arrival clock of each request (never going back).
    """

    times: Int64s
    starts: Int64s
    instants: Int64s
    sources: NDArray[np.uint32] | None = None

    def newest(self) -> Int64s:
        """The newest event time of each request."""
        if len(self.starts) == len(self.times):
            return self.times
        newest: Int64s = np.maximum.reduceat(self.times, self.starts)
        return newest

    def by_row(self, column: NDArray[Any]) -> NDArray[Any]:
        """A column with a value a request as one with a value a row."""
        if len(self.starts) == len(self.times):
            return column
        return np.repeat(column, np.diff(self.starts, append=len(self.times)))

    def parted(self, instant_ns: int) -> tuple[Requests, Requests]:
        """What arrived before this instant, and what at it or later; either may be empty."""
        request, row = int(np.searchsorted(self.instants, instant_ns)), self.first_row(instant_ns)
        first, second = (None, None) if self.sources is None else (self.sources[:row], self.sources[row:])
        return (
            Requests(self.times[:row], self.starts[:request], self.instants[:request], first),
            Requests(self.times[row:], self.starts[request:] - row, self.instants[request:], second),
        )

    def first_row(self, instant_ns: int) -> int:
        """The first row that arrived at this instant or later."""
        request = int(np.searchsorted(self.instants, instant_ns))
        return int(self.starts[request]) if request < len(self.starts) else len(self.times)


@dataclass(frozen=True, slots=True)
class Moves:
    """What a block did to a basis: where it stood before and after each request, and the steps it rose by.

    Step i: at `instants[i]` the basis rose to `values[i]` (strictly ascending), when `rows[i]` rows of the block had
    come in earlier requests.
    """

    before: Int64s
    after: Int64s
    instants: Int64s
    values: Int64s
    rows: Int64s


class Basis(Protocol):
    """Follows a feed block by block."""

    def add(self, block: Requests) -> Moves:
        """Take note of the next block."""


def _moves(start: int, points: Int64s, instants: Int64s, rows: Int64s, own: Int64s | slice) -> Moves:
    """Moves along points in time, at `own` of which the requests stand; `points` never go back, nor below start."""
    earlier = np.concatenate(([start], points[:-1]))
    rising = np.flatnonzero(points > earlier)
    return Moves(earlier[own], points[own], instants[rising], points[rising], rows[rising])


class NewestOfAll:
    """The newest event time over all sources: the event clock of a feed that has one source."""

    def __init__(self) -> None:
        self.newest_ns = NO_BASIS

    def add(self, block: Requests) -> Moves:
        """Costs some 3 ns an event."""
        points = np.maximum(np.maximum.accumulate(block.newest()), self.newest_ns)
        moves = _moves(self.newest_ns, points, block.instants, block.starts, slice(None))
        self.newest_ns = int(points[-1])
        return moves


class ArrivalClock:
    """The arrival clock: a request is judged by the instant at which it comes."""

    def __init__(self) -> None:
        self.now_ns = NO_BASIS

    def add(self, block: Requests) -> Moves:
        """Costs some 2 ns an event."""
        moves = _moves(self.now_ns, block.instants, block.instants, block.starts, slice(None))
        self.now_ns = int(block.instants[-1])
        return Moves(moves.after, moves.after, moves.instants, moves.values, moves.rows)


@dataclass(frozen=True, slots=True)
class Course:
    """What sources' words do over the points of a block: requests (at `own`) and falls into silence (`fall_points`).

    By word: its source, the source's newest time, the first point over which it lasts and the one after the last, and
    when it expires. By point: the least word over it, NONE without any.
    """

    sources: Int64s
    newest: Int64s
    begins: Int64s
    ends: Int64s
    expires: Int64s
    falls: Int64s
    own: Int64s
    fall_points: Int64s
    length: int
    least: Int64s


class LeastOfSources:
    """The least over the active sources of their newest event times: the event clock of a feed with sources."""

    def __init__(self, idle_after_ns: int | None = None) -> None:
        if idle_after_ns is not None and idle_after_ns < 1:
            raise ValueError(f"idle_after is at least 1 ns, not {idle_after_ns}")
        self._idle_after_ns = idle_after_ns
        self._newest = np.full(0, NO_BASIS, dtype=np.int64)  # by source number
        self._expires = np.full(0, NONE, dtype=np.int64)  # instant at which an active source falls idle
        self._active = np.zeros(0, dtype=np.bool_)
        self._newest_ns = NO_BASIS
        self._basis = NO_BASIS

    def add(self, block: Requests) -> Moves:
        """Costs 65 to 100 ns an event where each request holds one, and 20 ns a source and block.

        Every word of a source lasts over an interval: from its request until the source's next word, or until it falls
        idle. The basis is the least value among the intervals that cover a point, so it is found for all points at
        once.
        """
        return self.follow(block, self.course(block))

    def course(self, block: Requests) -> Course:
        """The words of the next block and the least at each point; `follow` must come next."""
        requests = len(block.starts)
        sources, spoken, newest = self._words(block)
        expires, expired, following = self._ends(block, sources, spoken)
        falls = np.unique(expires[expired])
        own = np.arange(requests) + np.searchsorted(falls, block.instants, side="right")
        fall_points = np.arange(len(falls)) + np.searchsorted(block.instants, falls, side="left")
        length = requests + len(falls)
        begins = np.concatenate((np.zeros(len(sources) - len(spoken), dtype=np.intp), own[spoken]))
        ends = np.full(len(sources), length)
        followed = following < requests
        ends[followed] = own[following[followed]]
        ends[expired] = fall_points[np.searchsorted(falls, expires[expired])]
        least = least_covering(begins, ends, newest, length)
        return Course(sources, newest, begins, ends, expires, falls, own, fall_points, length, least)

    def follow(self, block: Requests, course: Course) -> Moves:
        """Move along a course."""
        own, fall_points, length = course.own, course.fall_points, course.length
        instants, starts = np.empty((2, length), dtype=np.int64)
        instants[own], instants[fall_points] = block.instants, course.falls
        starts[own] = block.starts
        after = np.searchsorted(block.instants, course.falls, side="left")
        starts[fall_points] = np.append(block.starts, len(block.times))[after]
        points = self._never_back(block, course.least, own)
        moves = _moves(self._basis, points, instants, starts, own)
        self._basis = int(points[-1])
        self._carry(course.sources, course.newest, course.expires, course.ends == length)
        return moves

    def _words(self, block: Requests) -> tuple[Int64s, Int64s, Int64s]:
        """Words of the sources: source, request, newest event time of the source then.

        First those of the sources that are active at the start of the block, which have no request; then one for each
        source and request, by source and then by request.
        """
        words, rows, by_source, request = said_by_source(block)
        self._grow(int(by_source[-1]) + 1)
        fresh = np.concatenate(([True], by_source[1:] != by_source[:-1]))
        newest = np.maximum(grouped_greatest(words.times[rows], fresh), self._newest[by_source])
        last = np.concatenate((fresh[1:] | (request[1:] != request[:-1]), [True]))
        known = np.flatnonzero(self._active)
        return (
            np.concatenate((known, by_source[last])),
            request[last],
            np.concatenate((self._newest[known], newest[last])),
        )

    def _grow(self, count: int) -> None:
        if count > len(self._newest):
            size = max(count, 2 * len(self._newest))
            self._newest = grown(self._newest, size, NO_BASIS)
            self._expires = grown(self._expires, size, NONE)
            self._active = grown(self._active, size, False)

    def _ends(self, block: Requests, sources: Int64s, spoken: Int64s) -> tuple[Int64s, NDArray[np.bool_], Int64s]:
        """For each word the instant at which it would expire, whether it does so, and the request of the next word.

        No next word: a number beyond the requests. A source expires before it is heard at that same instant.
        """
        requests, known = len(block.starts), len(sources) - len(spoken)
        following = np.full(len(sources), requests, dtype=np.int64)
        own = sources[known:]
        following[known:-1][own[1:] == own[:-1]] = spoken[1:][own[1:] == own[:-1]]
        at = np.searchsorted(own, sources[:known])  # the first word in the block of a source that was active
        speaks = (at < len(own)) & (own[np.minimum(at, len(own) - 1)] == sources[:known])
        following[:known][speaks] = spoken[at[speaks]]
        expires = np.full(len(sources), NONE, dtype=np.int64)
        if self._idle_after_ns is not None:
            expires[:known] = self._expires[sources[:known]]
            expires[known:] = block.instants[spoken] + self._idle_after_ns
        until = np.append(block.instants, block.instants[-1])[following]
        return expires, expires <= until, following

    def _never_back(self, block: Requests, least: Int64s, own: Int64s) -> Int64s:
        """The points of the basis: where nobody counts the newest over all, and never behind where it was."""
        newest = np.full(len(least), NO_BASIS, dtype=np.int64)
        newest[own] = block.newest()
        newest = np.maximum(np.maximum.accumulate(newest), self._newest_ns)
        self._newest_ns = int(newest[-1])
        points = np.where(least == NONE, newest, least)
        return np.maximum(np.maximum.accumulate(points), self._basis)

    def _carry(self, sources: Int64s, newest: Int64s, expires: Int64s, lasting: NDArray[np.bool_]) -> None:
        """Keep the newest times, and the words that last beyond the block."""
        np.maximum.at(self._newest, sources, newest)
        self._active[sources] = False
        self._active[sources[lasting]] = True
        self._expires[sources[lasting]] = expires[lasting]


def said(block: Requests) -> Requests:
    """What sources said: a row for each stretch of rows of one source in one request, with its greatest time.

    A basis moves by it as by the block itself. A gateway's body is one stretch: then hardly anything is left to sort,
    which took advice on such a capture from 0.9 to 3 million events a second. Costs 1 to 2 ns a row.
    """
    rows, sources = len(block.times), block.sources
    if len(block.starts) == rows or sources is None:
        return block
    heads = heads_of(block)
    if len(heads) == rows:
        return block
    starts = np.arange(len(heads)) if len(heads) == len(block.starts) else np.searchsorted(heads, block.starts)
    return Requests(np.maximum.reduceat(block.times, heads), starts, block.instants, sources[heads])


def heads_of(block: Requests) -> Int64s:
    """The first row of each stretch of rows of one source in one request."""
    assert block.sources is not None
    begins = np.zeros(len(block.times), dtype=np.bool_)
    begins[block.starts] = True
    begins[1:] |= block.sources[1:] != block.sources[:-1]
    return np.flatnonzero(begins)


def said_by_source(block: Requests) -> tuple[Requests, Int64s, Int64s, Int64s]:
    """What sources `said`, and its rows by source, then as they came; of each of these the source and the request.

    Raises ValueError for a block without sources.
    """
    words = said(block)
    if words.sources is None:
        raise ValueError("what is followed source by source needs a column of sources")
    rows = rows_by_group(words.sources)
    request = np.searchsorted(words.starts, rows, side="right") - 1 if len(words.starts) < len(rows) else rows
    return words, rows, words.sources[rows].astype(np.int64), request


def grouped_greatest(values: Int64s, fresh: NDArray[np.bool_]) -> Int64s:
    """Running greatest value that begins anew wherever `fresh` is true (it is so in the first row).

    What is lifted by a group's number times more than the range of values ascends with the group, so one running
    greatest serves them all. Where int64 has no room for that, ranks are lifted instead of the values (10 times the
    cost).
    """
    groups = np.cumsum(fresh, dtype=np.int64)
    least, lift = int(values.min()), int(values.max()) - int(values.min()) + 1
    if lift * (int(groups[-1]) + 1) < 2**62:
        groups *= lift
        lifted: Int64s = np.maximum.accumulate(values - least + groups)
        lifted -= groups
        return lifted + least
    order = np.argsort(values)
    ranks = np.empty(len(values), dtype=np.int64)
    ranks[order] = np.arange(len(values))
    groups *= len(values)
    greatest: Int64s = values[order[np.maximum.accumulate(ranks + groups) - groups]]
    return greatest


def least_covering(begins: Int64s, ends: Int64s, values: Int64s, length: int) -> Int64s:
    """For each place from 0 to length - 1 the least value among the intervals [begin, end) over it; NONE without any.

    An interval is two that overlap, each of a power of two in length; from the longest to the shortest, what lies over
    a stretch is handed on to its halves. Costs length x log2(length) comparisons in columns (0.7 ns each).
    """
    spans = ends - begins
    powers = ((np.maximum(spans, 1).astype(np.float64).view(np.int64) >> 52) - 1023).astype(np.int8)
    powers[spans <= 0] = -1
    least = np.full(length, NONE, dtype=np.int64)
    for power in range(int(powers.max(initial=-1)), -1, -1):
        chosen = np.flatnonzero(powers == power)
        np.minimum.at(least, begins[chosen], values[chosen])
        np.minimum.at(least, ends[chosen] - (1 << power), values[chosen])
        half = (1 << power) >> 1
        if half:
            np.minimum(least[half:], least[:-half], out=least[half:])  # numpy reads all before it writes
    return least
