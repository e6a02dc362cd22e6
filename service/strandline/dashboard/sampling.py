"""What a feed's memory for the dashboard is filled with: one sample a second, counters for rates, late events.

Reads a runtime, changes nothing of it. Costs nothing per event but for late ones (one note a batch).
"""

from __future__ import annotations

from collections import deque
from typing import NamedTuple

import numpy as np

from ..core.ledger import Ledger
from ..core.view import HOLD_WHYS, hold_of
from ..hops import HOPS, Hop
from ..runtime import FeedRuntime
from .history import LANES, SECOND_NS, SINKS, SUMS, History, Rows, empty_row
from .lanes import Part, choose, parts_turn_ns
from .late import RecentLate
from .lateness import SinceLast

WHYS = tuple(HOLD_WHYS)
RATES_OVER_NS = 5 * SECOND_NS
MINUTE_S = 60
COUNTERS_APART_NS = 400_000_000
COUNTERS_AT_MOST = 16
LATE_KEPT_NS = 900 * SECOND_NS
OWED_AT_MOST = 300  # rows entered at a time where nothing happens: 11 us each; twenty at a time 27, one by one 39
STILL_NS = 60 * SECOND_NS  # after that a row is made anew
STILL_LONG_NS = 900 * SECOND_NS  # likewise where it came out the same, and nothing in it depends on time alone
BOOKS = ("received", "released", "late", "duplicate", "quarantined")


class Counters(NamedTuple):
    """What only grows, at one instant. `passed`: bodies past ingest and decode, events past the other hops."""

    now_ns: int
    books: tuple[int, ...]  # as BOOKS
    passed: tuple[int, ...]  # as HOPS
    hold_ns: int  # summed over the events released
    holds: int  # how many that were


class Rates(NamedTuple):
    """Per second over the last RATES_OVER_NS or what there is of it; the mean hold is None where nothing left."""

    books: dict[str, float]
    passed: dict[str, float]
    hold_mean_ns: float | None


class Still(NamedTuple):
    """The row of a feed that nothing waits in: it is told again while nothing happens, at a tenth of the cost."""

    traces: tuple[int, ...]
    row: Rows
    until_ns: int


class FeedMemory:
    """What the dashboard remembers of one feed."""

    def __init__(self, runtime: FeedRuntime) -> None:
        self.runtime = runtime
        self.since_ns = runtime.clock.now_ns()  # nothing is remembered of what was before
        self.late = RecentLate()
        self._history = History()
        self._lateness = SinceLast(runtime.feed.state.lateness)
        self._books, self._refusals = _books(runtime.feed.state.ledger), 0
        self._counters: deque[Counters] = deque(maxlen=COUNTERS_AT_MOST)
        self._lanes: list[int] = []
        self._still: Still | None = None
        self._owed: list[int] = []  # instants of samples that are the still row again and not in the history yet
        self._owed_counted = 0  # those of them that the counters have
        runtime.watchers.append(self.late.note)

    @property
    def books(self) -> dict[str, int]:
        """The books as the last sample found them: what the history's rows add up to."""
        return dict(zip(BOOKS, self._books, strict=True))

    def sample(self) -> None:
        """Take the feed as it stands now into the history; called once a second."""
        now_ns = self.runtime.clock.now_ns()
        self.late.forget_before(now_ns - LATE_KEPT_NS)
        still = self._still
        if still is not None and still.traces == self._traces() and now_ns < still.until_ns:
            self._owed.append(now_ns)
            if len(self._owed) >= OWED_AT_MOST:
                self._enter_owed()
        else:
            self._enter_owed()
            self._history.add(self._row(now_ns))

    @property
    def history(self) -> History:
        """The history up to the last sample."""
        self._enter_owed()
        return self._history

    def minute(self, now_ns: int) -> dict[str, int]:
        """Events by what became of them (names as BOOKS) in the last minute, to a second. Rows owed are of nothing."""
        rows = self._history.newest(MINUTE_S)
        rows = rows[rows["t_ns"] > now_ns - MINUTE_S * SECOND_NS]
        since = zip(BOOKS, _books(self.runtime.feed.state.ledger), self._books, strict=True)
        return {name: int(rows[name].sum()) + now - then for name, now, then in since}

    def _enter_owed(self) -> None:
        if self._owed:
            assert self._still is not None
            self._count_owed()
            self._history.add_again(self._still.row, self._owed)
            self._owed, self._owed_counted = [], 0

    def _count_owed(self) -> None:
        fresh = self._owed[self._owed_counted :]
        self._owed_counted = len(self._owed)
        for now_ns in fresh[-COUNTERS_AT_MOST:]:
            self._counters.append(self._counters[-1]._replace(now_ns=now_ns))

    def _row(self, now_ns: int) -> Rows:
        traces, hops = self._traces(), self.runtime.hops()
        self.note_counters(now_ns, hops)
        row = empty_row()
        row["t_ns"] = now_ns
        self._fill_feed(row)
        self._fill_hops(row, hops, now_ns)
        self._fill_lanes(row, now_ns)
        before, self._still = self._still, None
        if traces is not None and not row["held"] and not row["waiting"].any():
            still = row.copy()
            for name in SUMS:
                still[name] = 0
            self._still = Still(traces, still, self._still_until(before, traces, still, now_ns))
        return row

    def _still_until(self, before: Still | None, traces: tuple[int, ...], row: Rows, now_ns: int) -> int:
        """When the row must be made anew although nothing happens, since its lanes depend on time as well."""
        if before is None or before.traces != traces:
            return now_ns + STILL_NS
        before.row["t_ns"] = now_ns
        if before.row.tobytes() != row.tobytes():
            return now_ns + STILL_NS
        state = self.runtime.feed.state
        turns = parts_turn_ns(state.sources, now_ns, state.settings.idle_after_ns)
        forgotten = self.late.oldest_ns
        if forgotten is not None:
            turns = min(turns, forgotten + LATE_KEPT_NS + 1)
        return min(now_ns + STILL_LONG_NS, turns)

    def _traces(self) -> tuple[int, ...] | None:
        """What nothing can happen to the feed without changing; None while a body is on its way in."""
        runtime = self.runtime
        if runtime.reading.waiting:
            return None
        feed, sinks = runtime.feed, runtime.deliveries.values()
        refusals = sum(feed.refusals.values()) if feed.refusals else 0
        counts = (feed.next_lsn, feed.durable_lsn, runtime.reading.ended, runtime.decoding.ended, refusals)
        return (*counts, *[sink.failing for sink in sinks]) if sinks else counts

    def _failing(self) -> list[bool]:
        """Which sinks fail, in their order; the last place stands for all further ones."""
        failing = [delivery.failing for delivery in self.runtime.deliveries.values()]
        return [*failing[: SINKS - 1], any(failing[SINKS - 1 :])]

    def _fill_feed(self, row: Rows) -> None:
        state = self.runtime.feed.state
        row["watermark_ns"], row["newest_ns"] = state.watermark_ns, state.sources.newest_ns
        row["slack_ns"] = state.slack_ns
        row["held"], row["open_runs"] = state.runs.held, len(state.runs.lengths())
        before, self._books = self._books, _books(state.ledger)
        for name, now, then in zip(BOOKS, self._books, before, strict=True):
            row[name] = now - then
        row["balanced"] = state.ledger.balance() == 0
        refusals, self._refusals = self._refusals, sum(self.runtime.feed.refusals.values())
        row["refused"] = self._refusals - refusals
        failing = self._failing()
        row["failing"][0, : len(failing)] = failing
        row["lateness"] = self._lateness.take()

    @staticmethod
    def _fill_hops(row: Rows, hops: dict[str, Hop], now_ns: int) -> None:
        for place, name in enumerate(HOPS):
            hop = hops[name]
            row["waiting"][0, place] = min(hop.waiting, 2**31 - 1)
            row["oldest_ns"][0, place] = 0 if hop.oldest_ns is None else max(0, now_ns - hop.oldest_ns)

    def _fill_lanes(self, row: Rows, now_ns: int) -> None:
        state = self.runtime.feed.state
        hold = hold_of(state, max(now_ns, state.now_ns))
        row["hold_why"], row["hold_source"] = WHYS.index(hold.why), hold.source
        late = self.late.sources()
        part = Part(state.sources, hold.source, late, now_ns, state.settings.idle_after_ns)
        self._lanes = choose(part, hold.source, LANES, before=self._lanes)
        row["lane_source"][0, : len(self._lanes)] = self._lanes
        row["lane_newest_ns"][0, : len(self._lanes)] = state.sources.newest[np.array(self._lanes, dtype=np.intp)]

    def note_counters(self, now_ns: int, hops: dict[str, Hop]) -> None:
        """Remember the counters, unless that was done just now."""
        self._count_owed()
        if not self._counters or now_ns - self._counters[-1].now_ns >= COUNTERS_APART_NS:
            self._counters.append(self._read(now_ns, hops))

    def rates(self, now_ns: int, hops: dict[str, Hop]) -> Rates:
        """Rates up to now."""
        self._count_owed()
        now = self._read(now_ns, hops)
        earlier = [counters for counters in self._counters if counters.now_ns < now_ns]
        then = next((one for one in earlier if now_ns - one.now_ns <= RATES_OVER_NS), earlier[-1] if earlier else now)
        seconds = max(now.now_ns - then.now_ns, 1) / 1e9
        books = [max(0, a - b) / seconds for a, b in zip(now.books, then.books, strict=True)]
        passed = [max(0, a - b) / seconds for a, b in zip(now.passed, then.passed, strict=True)]
        left = (now.hold_ns - then.hold_ns, now.holds - then.holds)
        held_ns, holds = left if left[1] > 0 else (now.hold_ns, now.holds)
        mean_ns = held_ns / holds if holds else None
        return Rates(dict(zip(BOOKS, books, strict=True)), dict(zip(HOPS, passed, strict=True)), mean_ns)

    def _read(self, now_ns: int, hops: dict[str, Hop]) -> Counters:
        runtime, state = self.runtime, self.runtime.feed.state
        ledger, hold = state.ledger, state.figures.hold
        left = ledger.released + ledger.late + ledger.quarantined
        passed = (
            runtime.reading.ended,
            runtime.decoding.ended,
            ledger.received - hops["journal"].waiting,
            ledger.released,
            left - hops["release"].waiting,
            left - state.outbox.undelivered_events,
        )
        return Counters(now_ns, _books(ledger), passed, hold.total, int(hold.counts.sum()))


def _books(ledger: Ledger) -> tuple[int, ...]:
    return tuple(getattr(ledger, name) for name in BOOKS)
