"""Every slack at once: one pass over a feed says what each slack would have cost and what it would have lost.

An event is late for slack S when its time lies before basis - S, the basis being the one that stood when its request
arrived (`basis.py`). Its lateness is that basis minus its time, so the late share of S is the share of events whose
lateness is greater than S; and since the basis does not depend on S, one pass serves all slacks. How long an event is
held is the time from its arrival until the basis reaches its time + S (`held.py`).

What is exact, and what is bounded
  * Late share: exact for every slack of the grid, whatever the feed. Elsewhere `late_share` gives two bounds that
    differ by the events of one bucket (`core.sketch`); `LateSteps` over the lateness that `add` returns is exact
    everywhere.
  * Held events and bytes, mean over time and peak, at every slack of the grid: counted event by event (peaks are exact
    integers, means are sums in float64, relative rounding some 1e-12). What a request brings and lets go at once is
    never counted as held. Slacks that were given up because they hold more than `held_events_at_most` have none.
  * Hold: the mean is exact in the same sense, quantiles lie within the relative error. Both are over the on-time events
    that were let go within the feed; `open_events` are still held when the last request comes.
  * Idle sources (basis "sources" with `idle_after_ns`): late shares are exact, since the rule depends on the arrival
    clock only. A source falls idle between two arrivals; here that moves the watermark at once, while a service sees
    it at its next tick: its holds are longer by at most one tick. The same goes for the basis "arrival". Without
    knowing `idle_after`, two passes bound every feed: at each instant the basis lies between the one of "sources" with
    none falling idle and the one of "event", hence so do late share, held events and held bytes of every slack.
  * Not followed: `hold_at_most`, excuses and promises. They can only move a watermark further, so late shares here are
    lower bounds and what is held is an upper one; while no hold is as long as `hold_at_most`, it changes nothing.
  * Times before 1823-11-12 and after 2116-02-20 count as those instants.

Memory: the block at work and the events that the longest slack holds (some 100 bytes each), whatever the feed's length.
"""

from __future__ import annotations

import math
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from strandline.core.sketch import RELATIVE_ERROR, Share, Sketch, buckets_of

from .basis import TIME_GREATEST, TIME_LEAST, ArrivalClock, Basis, LeastOfSources, Moves, NewestOfAll, Requests
from .held import Held, Rows

Int64s = NDArray[np.int64]
BasisName = Literal["event", "arrival", "sources"]

SLACK_NS_AT_MOST = 2**61  # 73 years
# Its columns stay in a processor's cache: blocks of 2^14 or 2^18 rows cost 5 to 10 % more, of 2^20 25 to 70 %.
BLOCK_ROWS = 1 << 16
QUANTILES = (0.5, 0.9, 0.99, 0.999)


@dataclass(frozen=True, slots=True)
class SlackFigure:
    """What one slack does to a feed. None: not known (no lengths, or given up as holding too much)."""

    slack_ns: int
    events: int
    late: int
    late_share: float
    hold_ns_mean: float | None
    hold_ns_quantiles: dict[float, float] | None
    held_events_mean: float | None
    held_events_peak: int | None
    held_bytes_mean: float | None
    held_bytes_peak: int | None
    open_events: int | None


class SlackFigures:
    """Figures of a grid of slacks over a feed that is given chunk by chunk, in any chunks.

    `basis`: "event" (newest over all sources), "arrival" (the arrival clock), "sources" (least over the active
    sources). Raises ValueError for slacks that are not ascending, negative or longer than 73 years, or more than 64.
    """

    def __init__(
        self,
        slacks_ns: Sequence[int],
        basis: BasisName = "sources",
        *,
        idle_after_ns: int | None = None,
        relative_error: float = RELATIVE_ERROR,
        held_events_at_most: int = 4_000_000,
        sketched: bool = True,
    ) -> None:
        grid = list(slacks_ns)
        if not grid or grid != sorted(set(grid)) or grid[0] < 0 or grid[-1] > SLACK_NS_AT_MOST:
            raise ValueError("slacks must be one or more, ascending, from 0 to 2^61 ns (73 years)")
        self.slacks_ns: Int64s = np.array(grid, dtype=np.int64)
        self._basis = _basis(basis, idle_after_ns)
        self._by_clock = basis == "arrival"
        buckets = buckets_of(relative_error)
        self._held = Held(self.slacks_ns, buckets, by_clock=self._by_clock, events_at_most=held_events_at_most)
        self.sketch = Sketch(buckets)
        self._sketched = sketched
        self.events = 0
        self._late = np.zeros(len(grid) + 1, dtype=np.int64)  # by the number of slacks that an event is late for
        self._first_ns: int | None = None
        self._now_ns = TIME_LEAST
        self._basis_ns = TIME_LEAST
        self._lag = 0.0

    @property
    def late(self) -> Int64s:
        """For each slack of the grid the late events so far."""
        return self.events - np.cumsum(self._late[:-1])

    def add(
        self,
        times: Int64s,
        arrivals: Int64s,
        *,
        starts: Int64s | None = None,
        sources: NDArray[np.uint32] | None = None,
        lengths: NDArray[np.integer] | None = None,
    ) -> Int64s:
        """Take the next chunk: rows in order of arrival; answers the lateness of each in ns.

        `times`, `arrivals`: int64 ns since 1970. `starts`: first row of each request (None: each row is a request of
        its own); a chunk begins with a request, and a request has one arrival, the one of its first row. An arrival
        clock that steps back counts as standing still. `lengths`: payload bytes; given for all chunks or for none.
        Chunks of 10^5 rows and more are cheapest. The lateness is at least 0, but with the basis "arrival" it is the
        delay, which is below 0 for an event from the future.
        """
        block = self._whole(times, arrivals, starts, sources)
        if lengths is not None and len(lengths) != len(times):
            raise ValueError(f"{len(lengths)} lengths for {len(times)} events")
        lateness = np.empty(len(times), dtype=np.int64)
        for rows, part in self._blocks(block):
            sizes = None if lengths is None else lengths[rows].astype(np.int64)
            lateness[rows] = self._add(part, sizes)
        return lateness

    def _whole(
        self, times: Int64s, arrivals: Int64s, starts: Int64s | None, sources: NDArray[np.uint32] | None
    ) -> Requests:
        rows = len(times)
        if len(arrivals) != rows or (sources is not None and len(sources) != rows):
            raise ValueError("times, arrivals and sources must be of equal length")
        if starts is None:
            starts = np.arange(rows, dtype=np.int64)
        elif rows and not (len(starts) and starts[0] == 0 and starts[-1] < rows and np.all(starts[1:] > starts[:-1])):
            raise ValueError("starts must ascend strictly from 0 and stay below the number of rows")
        instants = np.maximum.accumulate(_within(arrivals[starts]))
        return Requests(_within(times), starts, np.maximum(instants, self._now_ns), sources)

    def _blocks(self, whole: Requests) -> Iterator[tuple[slice, Requests]]:
        """Whole requests, as many at a time as keep a block small, but not small against what is carried along."""
        first, rows, requests = 0, len(whole.times), len(whole.starts)
        while first < requests:
            begin = int(whole.starts[first])
            wanted = begin + max(BLOCK_ROWS, self._held.carried)
            after = max(first + 1, int(np.searchsorted(whole.starts, wanted, side="right")) - 1)
            after = requests if wanted >= rows else after
            part = slice(begin, int(whole.starts[after]) if after < requests else rows)
            sources = None if whole.sources is None else whole.sources[part]
            yield (
                part,
                Requests(whole.times[part], whole.starts[first:after] - begin, whole.instants[first:after], sources),
            )
            first = after

    def _add(self, block: Requests, lengths: Int64s | None) -> Int64s:
        moves = self._basis.add(block)
        before, after, arrivals = _by_row(block, moves.before, moves.after, block.instants)
        behind = before - block.times
        lateness = behind if self._by_clock else np.maximum(behind, 0)
        if self._sketched:
            self.sketch.add(lateness)
        self.events += len(lateness)
        self._late += np.bincount(_levels(self.slacks_ns, lateness - 1), minlength=len(self._late))
        levels = _levels(self.slacks_ns, after - block.times)
        self._held.add(Rows(block.times, arrivals, levels, lengths), moves)
        self._measure_lag(block, moves)
        return lateness

    def _measure_lag(self, block: Requests, moves: Moves) -> None:
        """Add the area between the arrival clock and the basis."""
        if self._first_ns is None:
            self._first_ns = self._now_ns = int(block.instants[0])
        clock = np.concatenate(([self._now_ns], moves.instants, block.instants[-1:]))
        basis = np.concatenate(([self._basis_ns], moves.values))
        spans = np.diff(clock).astype(np.float64)
        self._lag += float(spans @ ((clock[:-1] - basis) / 2.0 + (clock[1:] - basis) / 2.0))
        self._now_ns, self._basis_ns = int(clock[-1]), int(basis[-1])

    @property
    def lag_ns_mean(self) -> float:
        """How far the basis lies behind the arrival clock, mean over time; a watermark of slack S lies S further."""
        span = self._now_ns - self._first_ns if self._first_ns is not None else 0
        return self._lag / span if span else math.nan

    def late_share(self, slack_ns: int) -> Share:
        """The late share of any slack: exact for those of the grid, else within the bounds of the sketch."""
        place = int(np.searchsorted(self.slacks_ns, slack_ns))
        if self.events and place < len(self.slacks_ns) and self.slacks_ns[place] == slack_ns:
            share = int(self.late[place]) / self.events
            return Share(share, share)
        if not self._sketched:
            raise ValueError("without a sketch only the slacks of the grid have a late share")
        return self.sketch.late_share(slack_ns)

    def figures(self, quantiles: Sequence[float] = QUANTILES) -> list[SlackFigure]:
        """Figures of each slack of the grid, so far."""
        return [self._figure(place, quantiles) for place in range(len(self.slacks_ns))]

    def _figure(self, place: int, quantiles: Sequence[float]) -> SlackFigure:
        slack_ns, late = int(self.slacks_ns[place]), int(self.late[place])
        share = late / self.events if self.events else 0.0
        held = self._held.figure(place)
        if held is None:
            return SlackFigure(slack_ns, self.events, late, share, None, None, None, None, None, None, None)
        released = self.events - late - held.open_events
        counts = held.counts
        counts[0] += released - int(counts.sum())  # those that their own request let go
        hold_quantiles = {q: self._held.buckets.quantile(counts, q) for q in quantiles} if released else None
        return SlackFigure(
            slack_ns=slack_ns,
            events=self.events,
            late=late,
            late_share=share,
            hold_ns_mean=held.hold_ns_total / released if released else None,
            hold_ns_quantiles=hold_quantiles,
            held_events_mean=held.events_mean,
            held_events_peak=held.events_peak,
            held_bytes_mean=held.bytes_mean,
            held_bytes_peak=held.bytes_peak,
            open_events=held.open_events,
        )

    def check(self) -> None:
        """Assert that all parts have counted the same events."""
        self.sketch.check()
        self._held.check()
        assert int(self._late.sum()) == self.events
        assert self.sketch.total == (self.events if self._sketched else 0)
        for place in range(self._held.measured):
            held = self._held.figure(place)
            assert held is not None
            assert int(held.counts.sum()) + held.open_events <= self.events - int(self._late[place + 1 :].sum())


class LateSteps:
    """The late share of every slack exactly: a step function with a step at each value of the lateness.

    `slacks_ns` are the different values, ascending; late[i] events are later than slacks_ns[i]. Needs all the lateness
    at once (8 bytes an event, and as much again for sorting). Works for delays below 0 too.
    """

    def __init__(self, lateness_ns: Int64s) -> None:
        """Costs a sort: some 10 to 20 ns an event."""
        ordered = np.sort(lateness_ns)
        ends = np.flatnonzero(np.append(ordered[1:] != ordered[:-1], [True] * (len(ordered) > 0)))
        self.events = len(ordered)
        self.slacks_ns: Int64s = ordered[ends]
        self.late: Int64s = self.events - 1 - ends

    def late_share(self, slack_ns: int) -> float:
        """The share of events later than this slack."""
        place = int(np.searchsorted(self.slacks_ns, slack_ns, side="right"))
        if not self.events:
            return 0.0
        return (int(self.late[place - 1]) if place else self.events) / self.events

    def slack_for(self, late_share: float) -> int:
        """The least slack (at least 0) that keeps this late share on these events."""
        if not 0 <= late_share <= 1:
            raise ValueError(f"a late share lies between 0 and 1, not at {late_share}")
        if self.late_share(0) <= late_share:
            return 0
        return int(self.slacks_ns[np.argmax(self.late <= late_share * self.events)])

    def quantile(self, q: float) -> int:
        """The least value that at least a share q of the events do not exceed. Raises ValueError of nothing."""
        if not self.events or not 0 <= q <= 1:
            raise ValueError(f"no quantile {q} of {self.events} events")
        wanted = max(1, math.ceil(q * self.events))
        return int(self.slacks_ns[np.argmax(self.events - self.late >= wanted)])


def _basis(name: BasisName, idle_after_ns: int | None) -> Basis:
    match name:
        case "sources":
            return LeastOfSources(idle_after_ns)
        case "event":
            return NewestOfAll()
        case "arrival":
            return ArrivalClock()
    raise ValueError(f"a basis is event, arrival or sources, not {name!r}")


def _levels(slacks_ns: Int64s, values: Int64s) -> NDArray[np.uint8]:
    """How many of the slacks each value reaches. One comparison a slack: 1.4 ns for 5, 18 for 64 (a search: 9, 28)."""
    levels = np.zeros(len(values), dtype=np.uint8)
    for slack_ns in slacks_ns.tolist():
        levels += values >= slack_ns
    return levels


def _within(times: Int64s) -> Int64s:
    """Times within the bounds that leave room for differences (looked at first, since hardly any are beyond)."""
    if len(times) and (times.min() < TIME_LEAST or times.max() > TIME_GREATEST):
        return np.clip(times, TIME_LEAST, TIME_GREATEST)
    return times


def _by_row(block: Requests, *columns: Int64s) -> tuple[Int64s, ...]:
    """Columns with a value a request, as columns with a value a row."""
    if len(block.starts) == len(block.times):
        return columns
    sizes = np.diff(block.starts, append=len(block.times))
    return tuple(np.repeat(column, sizes) for column in columns)
