"""What slacks would hold back: for each slack of a grid the events and bytes held over time, and the hold of each.

An event is held by slack S while the basis stands below its time + S; it is held at all if the basis stood below that
after its own request. Here lives the pass that finds this for a grid of slacks at once, block by block, with the events
that the longest slack holds carried along. Where the basis comes from, and who is late, is not known here.

Method: held events and those of the block are sorted by event time once for all slacks. For a slack the basis's steps
are looked up in that column: what lies between two of them was let go at the second. Counting, along it, the events
that the slack held at all (`levels`, one byte an event) gives releases; counting them along the order of arrival gives
arrivals; the difference of both is what was held, at every step.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from strandline.core.sketch import Buckets

from .basis import NO_BASIS, Moves

Int64s = NDArray[np.int64]
Levels = NDArray[np.uint8]
Counts = NDArray[np.int32] | NDArray[np.int64]

SLACKS_AT_MOST = 64


@dataclass(frozen=True, slots=True)
class Rows:
    """Events of a block in order of arrival; `levels`: how many slacks of the grid would not hold the event at all."""

    times: Int64s
    arrivals: Int64s
    levels: Levels
    lengths: Int64s | None = None


@dataclass(frozen=True, slots=True)
class HeldFigure:
    """What one slack held. Means are over time; bytes are None without lengths; `counts` by place of the buckets."""

    events_mean: float
    events_peak: int
    bytes_mean: float | None
    bytes_peak: int | None
    open_events: int  # still held when the last request came
    hold_ns_total: float  # of the events that were let go
    counts: Int64s  # holds of the events that were held and let go


@dataclass(frozen=True, slots=True)
class _Steps:
    """A block's steps, prepared for all slacks: `before` rows came before each and by the end, `spans` follow each."""

    values: Int64s
    instants: Int64s
    before: Int64s
    spans: NDArray[np.float64]
    end: int

    @classmethod
    def of(cls, moves: Moves, rows: int, end: int) -> _Steps:
        spans = np.diff(moves.instants, append=end).astype(np.float64)
        return cls(moves.values, moves.instants, np.append(moves.rows, rows), spans, end)


class _Account:
    """Events or bytes, for each slack: what is held now, its greatest value, its integral over time."""

    def __init__(self, slacks: int) -> None:
        self.now = np.zeros(slacks, dtype=np.int64)
        self.peak = np.zeros(slacks, dtype=np.int64)
        self.integral = np.zeros(slacks, dtype=np.float64)

    def move(self, slack: int, came: Counts, gone: Counts) -> None:
        """What came before each step and by the end, and was gone after each step (running from the block's start)."""
        came[1:] -= gone
        self.peak[slack] = max(self.peak[slack], self.now[slack] + int(came.max()))
        self.now[slack] += int(came[-1])


class Held:
    """Follows what each slack of an ascending grid holds.

    `by_clock`: the basis is the arrival clock, so an event is let go at its time + slack; else at the step that
    reaches it. Beyond `events_at_most` events carried along the longest slacks are given up (`measured` counts the
    ones that are left).
    """

    def __init__(self, slacks_ns: Int64s, buckets: Buckets, *, by_clock: bool, events_at_most: int) -> None:
        if len(slacks_ns) > SLACKS_AT_MOST:
            raise ValueError(f"{len(slacks_ns)} slacks are more than the {SLACKS_AT_MOST} that one pass can take")
        self._slacks, self.buckets, self._by_clock, self._at_most = slacks_ns, buckets, by_clock, events_at_most
        self.measured = len(slacks_ns)
        self._times, self._arrivals = np.empty((2, 0), dtype=np.int64)
        self._levels = np.empty(0, dtype=np.uint8)
        self._lengths: Int64s | None = None
        self._events, self._bytes = _Account(len(slacks_ns)), _Account(len(slacks_ns))
        self._counts = np.zeros((len(slacks_ns), len(buckets)), dtype=np.int64)
        self._basis = NO_BASIS
        self._first_ns: int | None = None
        self._now_ns = 0

    @property
    def carried(self) -> int:
        """Events carried along."""
        return len(self._times)

    def add(self, rows: Rows, moves: Moves) -> None:
        """Take the next block (at least one row). Costs some 15 ns an event and slack, and 55 ns an event."""
        if self._first_ns is None:
            self._first_ns = self._now_ns = int(rows.arrivals[0])
        end = int(rows.arrivals[-1])
        if self.measured:
            self._merge(rows)
            self._wait(rows, end)
            steps = _Steps.of(moves, len(rows.times), end)
            for slack in range(self.measured):
                self._follow(slack, rows, steps)
        self._now_ns = end
        if len(moves.values):
            self._basis = int(moves.values[-1])
        self._forget()

    def _merge(self, rows: Rows) -> None:
        """Put the events of the block that some slack holds among the ones carried along, by event time."""
        new = np.flatnonzero(rows.levels < self.measured)
        times = np.concatenate((self._times, rows.times[new]))
        order = np.argsort(times)
        self._times = times[order]
        self._arrivals = np.concatenate((self._arrivals, rows.arrivals[new]))[order]
        self._levels = np.concatenate((self._levels, rows.levels[new]))[order]
        if rows.lengths is not None:
            before = np.empty(0, dtype=np.int64) if self._lengths is None else self._lengths
            self._lengths = np.concatenate((before, rows.lengths[new]))[order]

    def _wait(self, rows: Rows, end: int) -> None:
        """Add to the integrals as if all that was held at the block's start, or came, had waited until its end."""
        slacks = len(self._slacks)
        remaining = (end - rows.arrivals).astype(np.float64)
        for account, weights in ((self._events, None), (self._bytes, rows.lengths)):
            if account is self._bytes and weights is None:
                continue
            waits = remaining if weights is None else remaining * weights
            by_level = np.bincount(rows.levels, weights=waits, minlength=slacks + 1)[:slacks]
            account.integral += account.now * float(end - self._now_ns) + np.cumsum(by_level)

    def _follow(self, slack: int, rows: Rows, steps: _Steps) -> None:
        """Follow one slack through the block: arrivals and releases along its steps, and the hold of each event."""
        slack_ns = int(self._slacks[slack])
        low = int(np.searchsorted(self._times, self._basis - slack_ns, side="right"))
        cuts = np.searchsorted(self._times, steps.values - slack_ns, side="right")
        cuts -= low
        gone = slice(low, low + int(cuts[-1]) if len(cuts) else low)
        was_held, is_held = self._levels[gone] <= slack, rows.levels <= slack
        released = _running(was_held).take(cuts)
        self._events.move(slack, _running(is_held).take(steps.before), released)
        freed = None
        if rows.lengths is not None and self._lengths is not None:
            freed = _running(self._lengths[gone] * was_held).take(cuts)
            self._bytes.move(slack, _running(rows.lengths * is_held).take(steps.before), freed)
        if not len(was_held):
            return
        if self._by_clock:
            let_go = self._times[gone] + slack_ns
            saved = (steps.end - let_go) * was_held.astype(np.float64)
            self._events.integral[slack] -= saved.sum()
            if freed is not None and self._lengths is not None:
                self._bytes.integral[slack] -= float(saved @ self._lengths[gone])
        else:
            let_go = np.repeat(steps.instants, np.diff(cuts, prepend=0))
            self._events.integral[slack] -= float(steps.spans @ released)
            if freed is not None:
                self._bytes.integral[slack] -= float(steps.spans @ freed)
        let_go -= self._arrivals[gone]
        # An event that was not held at all came when the basis had reached it: a hold of 0 and less, counted as 0.
        self._counts[slack] += self.buckets.counts(let_go)
        self._counts[slack, 0] -= len(was_held) - int(released[-1])

    def _forget(self) -> None:
        """Drop what the longest slack has let go; give up slacks while they make it carry too much."""
        kept = self._kept()
        while self.measured and len(self._times) - kept > self._at_most:
            self.measured -= 1
            kept = self._kept()
        if kept:
            self._times, self._arrivals = self._times[kept:].copy(), self._arrivals[kept:].copy()
            self._levels = self._levels[kept:].copy()
            self._lengths = None if self._lengths is None else self._lengths[kept:].copy()

    def _kept(self) -> int:
        if not self.measured:
            return len(self._times)
        bound = self._basis - int(self._slacks[self.measured - 1])
        return int(np.searchsorted(self._times, bound, side="right"))

    def figure(self, slack: int) -> HeldFigure | None:
        """What the slack of this number held so far; None where it was given up."""
        if slack >= self.measured:
            return None
        low = int(np.searchsorted(self._times, self._basis - int(self._slacks[slack]), side="right"))
        still = self._levels[low:] <= slack
        waited = float(((self._now_ns - self._arrivals[low:]).astype(np.float64) * still).sum())
        span = self._now_ns - (self._first_ns or 0) if self._first_ns is not None else 0
        per_span = 1 / span if span else 0.0
        with_bytes = self._lengths is not None
        return HeldFigure(
            events_mean=float(self._events.integral[slack]) * per_span,
            events_peak=int(self._events.peak[slack]),
            bytes_mean=float(self._bytes.integral[slack]) * per_span if with_bytes else None,
            bytes_peak=int(self._bytes.peak[slack]) if with_bytes else None,
            open_events=int(self._events.now[slack]),
            hold_ns_total=float(self._events.integral[slack]) - waited,
            counts=self._counts[slack].copy(),
        )

    def check(self) -> None:
        """Assert that what is carried is in order, is held by the longest slack, and is what the counts say."""
        assert np.all(self._times[1:] >= self._times[:-1])
        assert self._kept() == 0 or not self.measured
        for slack in range(self.measured):
            low = int(np.searchsorted(self._times, self._basis - int(self._slacks[slack]), side="right"))
            still = self._levels[low:] <= slack
            assert int(still.sum()) == self._events.now[slack] <= self._events.peak[slack]
            if self._lengths is not None:
                assert int(self._lengths[low:] @ still) == self._bytes.now[slack] <= self._bytes.peak[slack]
        assert np.all(self._counts >= 0)


def _running(column: Int64s | NDArray[np.bool_]) -> Counts:
    """Running sums that begin with 0, one more than values. Counts of a block fit in int32, at half the cost."""
    size = len(column) + 1
    sums: Counts = np.zeros(size, np.int32) if column.dtype == np.bool_ else np.zeros(size, np.int64)
    np.cumsum(column, out=sums[1:])
    return sums
