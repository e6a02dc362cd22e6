"""Rows on starting again: folding a journal against having taken it in, and the start of a feed with much behind it.

What is measured is what `runtime` does between its making and the first request: opening the journal, taking over the
newest snapshot, folding what came behind, starting. Files come from the page cache, as after the crash of a process.
Taking in is the whole service's, over HTTP, from the first body to the last answer.
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
from .service import course_of, events_per_s_service

LARGE_EVENTS = 10_000_000
EVENTS_PER_S = 10_000.0
SLACK_NS = 10 * SECOND_NS  # so 10^5 events are held, and those that come out of order
AT_MOST_BYTES = 64 << 30
FLUSH_BYTES = 16 << 20
TICK_NS = 250_000_000
SETTINGS = Settings("bench", slack_ns=SLACK_NS, idle_after_ns=3600 * SECOND_NS, hold_at_most_ns=3600 * SECOND_NS)
SPEEDUP_AT_LEAST = 5.0


class Made:
    """A folder with a journal of so many events."""

    def __init__(self, events: int, scale: Scale, *, snapshot_at: float | None) -> None:
        """`snapshot_at`: the share of the events after which a snapshot is written; None: without any."""
        self._folder = tempfile.TemporaryDirectory(prefix="strandline-bench-")
        weakref.finalize(self, self._folder.cleanup)
        self.path, self.events = Path(self._folder.name), events
        self._journal = Journal.open(LocalDisk(self.path), "feeds/bench", journal_bytes_at_most=AT_MOST_BYTES)
        self._feed = Feed(SETTINGS)
        self._ingest(scale, None if snapshot_at is None else int(snapshot_at * events))
        self.held, self.bytes = self._feed.state.runs.held, self._feed.next_lsn
        self._journal.close()

    def _ingest(self, scale: Scale, snapshot_at: int | None) -> None:
        trace = shape("exponential", self.events, scale.seed, events_per_s=EVENTS_PER_S, mean_s=2.0)
        decoder = Decoder("bench", "/observed_at", "ns", "/station")
        self._do(self._feed.start(int(trace.arrivals[0]), {}))
        taken, ticked = 0, int(trace.arrivals[0])
        for body in bodies(trace, cut_by_count(trace, scale.body_events), Style("ns")):
            arrival = decoder.decode(body.payload, MEDIA_TYPE, self._feed.state.sources.numbers)
            while ticked + TICK_NS < body.due_ns:
                ticked += TICK_NS
                self._do(self._feed.tick(ticked))
            self._do(self._feed.arrive(arrival, body.due_ns, 0))
            taken += len(body)
            if snapshot_at is not None and taken >= snapshot_at:
                self._settle()
                self._journal.write_snapshot(self._feed.next_lsn, self._feed.save())
                snapshot_at = None
        self._settle()

    def _do(self, effects: list[Effect]) -> None:
        for effect in effects:
            if isinstance(effect, Append):
                self._journal.append(effect.lsn, effect.kind, effect.parts)
        if self._journal.queued_bytes >= FLUSH_BYTES:
            self._settle()

    def _settle(self) -> None:
        self._feed.synced(self._journal.flush())
        self._journal.replenish()


def started(path: Path, received: int) -> tuple[float, int]:
    """Seconds until a feed that took in so many events could take its first request; how many records it folded."""
    begin = time.perf_counter()
    journal = Journal.open(LocalDisk(path), "feeds/bench", journal_bytes_at_most=AT_MOST_BYTES)
    feed = Feed(SETTINGS)
    folded = _recovered(journal, feed)
    feed.start(feed.state.now_ns, {})
    seconds = time.perf_counter() - begin
    journal.close()
    if feed.state.ledger.received != received or feed.state.ledger.balance():
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
    course = course_of(scale.body_events, scale)

    def measure() -> Sample:
        with tempfile.TemporaryDirectory(prefix="strandline-bench-") as name, asyncio.Runner() as runner:
            folder = Path(name)
            rate, _ = runner.run(events_per_s_service(course, folder, 'journal = { retain = "1h" }'))
            for snapshot in (folder / "data" / "feeds" / "bench").glob("snapshot-*.snap"):
                snapshot.unlink()
            begin_cpu = time.process_time()
            seconds, folded = started(folder / "data", len(course.trace))
            beside = {
                "events/s folded": len(course.trace) / seconds,
                "events/s taken in": rate,
                "records": float(folded),
                "s of the processor": time.process_time() - begin_cpu,
            }
            return Sample(len(course.trace) / rate / seconds, beside)

    return measure


def _with_snapshot(events: int, scale: Scale) -> Measure:
    made = Made(events, scale, snapshot_at=0.99)

    def measure() -> Sample:
        seconds, folded = started(made.path, made.events)
        return Sample(seconds, {"held": float(made.held), "records folded": float(folded), "journal bytes": made.bytes})

    return measure


def rows(scale: Scale) -> list[Row]:
    """Folding without a snapshot against ingest; start to ready with a snapshot, also at 10^7 events (`--full`)."""
    name = "recovery, start to ready with {:,} events in the journal"
    large = Row(name.format(LARGE_EVENTS), "s", partial(_with_snapshot, LARGE_EVENTS), rounds_at_most=3)
    return [
        Row(
            "recovery without a snapshot against ingest", "x", _without_snapshot, SPEEDUP_AT_LEAST, "at least",
            rounds_at_most=3, warm=False,
        ),
        Row(name.format(scale.events), "s", partial(_with_snapshot, scale.events)),
        *([large] if scale.full else []),
    ]  # fmt: skip
