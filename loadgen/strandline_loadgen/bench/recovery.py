"""Rows on starting again: folding a journal against having taken it in, and the start of a feed with much behind it.

The journal is made through the decoder and the core as the service does it, on a real disk; what is measured is what
`runtime` does between its making and the first request: opening the journal, taking over the newest snapshot, folding
what came behind, starting. Files come from the page cache, as after the crash of a process.
"""

from __future__ import annotations

import asyncio
import tempfile
import time
import weakref
from functools import partial
from pathlib import Path

from strandline.core.effects import Append, Effect
from strandline.core.feed import Feed
from strandline.core.settings import SECOND_NS, Settings
from strandline.housekeeping import Housekeeper
from strandline.ingest.decode import Decoder
from strandline.journal.commit import GroupCommit
from strandline.journal.disk import LocalDisk
from strandline.journal.journal import Journal

from strandline_loadgen.bodies import Style, bodies, cut_by_count
from strandline_loadgen.shapes import shape

from .harness import Measure, Row, Sample, Scale
from .path import MEDIA_TYPE

LARGE_EVENTS = 10_000_000
EVENTS_PER_S = 10_000.0
SLACK_NS = 10 * SECOND_NS  # so 10^5 events are held, and those that come out of order
AT_MOST_BYTES = 64 << 30
FLUSH_BYTES = 16 << 20
TICK_NS = 250_000_000
SETTINGS = Settings("bench", slack_ns=SLACK_NS, idle_after_ns=3600 * SECOND_NS, hold_at_most_ns=3600 * SECOND_NS)
SPEEDUP_AT_LEAST = 5.0


class Made:
    """A folder with a journal of so many events; `ingest_s` is what taking them in took."""

    def __init__(self, events: int, scale: Scale, *, snapshot_at: float | None) -> None:
        """`snapshot_at`: the share of the events after which a snapshot is written; None: without any."""
        self._folder = tempfile.TemporaryDirectory(prefix="strandline-bench-")
        weakref.finalize(self, self._folder.cleanup)
        self.path, self.events = Path(self._folder.name), events
        self._journal = Journal.open(LocalDisk(self.path), "feeds/bench", journal_bytes_at_most=AT_MOST_BYTES)
        self._feed = Feed(SETTINGS)
        self.ingest_cpu_s = 0.0
        self.ingest_s = self._ingest(scale, None if snapshot_at is None else int(snapshot_at * events))
        self.held, self.bytes = self._feed.state.runs.held, self._feed.next_lsn
        self._journal.close()

    def _ingest(self, scale: Scale, snapshot_at: int | None) -> float:
        trace = shape("exponential", self.events, scale.seed, events_per_s=EVENTS_PER_S, mean_s=2.0)
        decoder = Decoder("bench", "/observed_at", "ns", "/station")
        self._do(self._feed.start(int(trace.arrivals[0]), {}))
        taken, ticked, busy_s = 0, int(trace.arrivals[0]), 0.0
        for body in bodies(trace, cut_by_count(trace, scale.body_events), Style("ns")):
            begin, begin_cpu = time.perf_counter(), time.process_time()
            arrival = decoder.decode(body.payload, MEDIA_TYPE, self._feed.state.sources.numbers)
            while ticked + TICK_NS < body.due_ns:
                ticked += TICK_NS
                self._do(self._feed.tick(ticked))
            self._do(self._feed.arrive(arrival, body.due_ns, 0))
            busy_s += time.perf_counter() - begin
            self.ingest_cpu_s += time.process_time() - begin_cpu
            taken += len(body)
            if snapshot_at is not None and taken >= snapshot_at:
                self._settle()
                self._journal.write_snapshot(self._feed.next_lsn, self._feed.save())
                snapshot_at = None
        begin = time.perf_counter()
        self._settle()
        return busy_s + time.perf_counter() - begin

    def _do(self, effects: list[Effect]) -> None:
        for effect in effects:
            if isinstance(effect, Append):
                self._journal.append(effect.lsn, effect.kind, effect.parts)
        if self._journal.queued_bytes >= FLUSH_BYTES:
            self._settle()

    def _settle(self) -> None:
        self._feed.synced(self._journal.flush())
        self._journal.replenish()

    def start(self) -> tuple[float, int]:
        """Seconds until the feed could take its first request, and how many records were folded."""
        begin = time.perf_counter()
        journal = Journal.open(LocalDisk(self.path), "feeds/bench", journal_bytes_at_most=AT_MOST_BYTES)
        feed = Feed(SETTINGS)
        folded = _recovered(journal, feed)
        feed.start(feed.state.now_ns, {})
        seconds = time.perf_counter() - begin
        journal.close()
        if (feed.next_lsn < self.bytes) or feed.state.runs.held != self.held:
            raise RuntimeError("the feed is not what it was: no figure would mean anything")
        return seconds, folded


class _Stopped:
    """A clock that is not asked for anything that matters here."""

    def now_ns(self) -> int:
        return 0


def _recovered(journal: Journal, feed: Feed) -> int:
    async def settle() -> None:
        await asyncio.sleep(0)

    commit = GroupCommit(journal, lambda lsn: None, lambda error: None)
    try:
        return Housekeeper(journal, feed, commit, settle, _Stopped()).recover()
    finally:
        commit._worker.shutdown()


def _without_snapshot(scale: Scale) -> Measure:
    def measure() -> Sample:
        made = Made(scale.events, scale, snapshot_at=None)  # anew each time: both are measured in one visit
        begin_cpu = time.process_time()
        seconds, folded = made.start()
        beside = {
            "ratio of processor time": made.ingest_cpu_s / (time.process_time() - begin_cpu),
            "events/s folded": made.events / seconds,
            "events/s taken in": made.events / made.ingest_s,
            "records": float(folded),
        }
        return Sample(made.ingest_s / seconds, beside)

    return measure


def _with_snapshot(events: int, scale: Scale) -> Measure:
    made = Made(events, scale, snapshot_at=0.99)

    def measure() -> Sample:
        seconds, folded = made.start()
        return Sample(seconds, {"held": float(made.held), "records folded": float(folded), "journal bytes": made.bytes})

    return measure


def rows(scale: Scale) -> list[Row]:
    """Folding without a snapshot against ingest; start to ready with a snapshot, also at 10^7 events (`--only`)."""
    name = "recovery, start to ready with {:,} events in the journal"
    return [
        Row(
            "recovery without a snapshot against ingest", "x", _without_snapshot, SPEEDUP_AT_LEAST, "at least",
        ),
        Row(name.format(scale.events), "s", partial(_with_snapshot, scale.events)),
        Row(name.format(LARGE_EVENTS), "s", partial(_with_snapshot, LARGE_EVENTS), on_demand=True),
    ]  # fmt: skip
