"""Rows on memory: heap bytes for each event that is held, whatever its line weighs. The journal lies on a real disk.

Counted is what Python's allocator and numpy hold (tracemalloc), from an empty feed to one that holds everything; bodies
and arrivals are let go as they are in the service. The journal's mapped segments are the page cache's, not the heap's.
"""

from __future__ import annotations

import gc
import shutil
import tempfile
import tracemalloc
from dataclasses import replace
from functools import partial
from pathlib import Path

from strandline.core.effects import Append, Effect, Sync
from strandline.core.feed import Feed
from strandline.core.settings import Settings
from strandline.ingest.decode import Decoder
from strandline.journal.disk import LocalDisk
from strandline.journal.journal import Journal

from strandline_loadgen.bodies import Style, bodies, cut_by_count
from strandline_loadgen.shapes import shape

from .harness import Measure, Row, Sample, Scale
from .path import FOREVER_NS, MEDIA_TYPE

LARGE_HELD, GOAL_BYTES = 10_000_000, 24.0  # the two columns of an event, and nothing else
PAYLOADS = (100, 2_000)
LEFT_FREE_BYTES = 5 << 30
FLUSH_BYTES = 16 << 20


class _OnDisk:
    """Decoder, core and a journal on disk; nothing is released."""

    def __init__(self, folder: Path, journal_bytes: int) -> None:
        settings = Settings("bench", slack_ns=FOREVER_NS, idle_after_ns=FOREVER_NS, hold_at_most_ns=FOREVER_NS)
        self._decoder = Decoder("bench", "/observed_at", "ns", "/station", None)
        self._journal = Journal.open(LocalDisk(folder), "feeds/bench", journal_bytes_at_most=journal_bytes)
        self.feed = Feed(settings)
        self._carry_out(self.feed.start(0, {}))

    def take(self, payload: bytes, now_ns: int, token: int) -> None:
        """One request, up to the journal."""
        arrival = self._decoder.decode(payload, MEDIA_TYPE, self.feed.state.sources.numbers)
        self._carry_out(self.feed.arrive(arrival, now_ns, token))

    def _carry_out(self, effects: list[Effect]) -> None:
        for effect in effects:
            if isinstance(effect, Append):
                self._journal.append(effect.lsn, effect.kind, effect.parts)
            elif isinstance(effect, Sync) and self._journal.queued_bytes >= FLUSH_BYTES:
                self.settle()

    def settle(self) -> None:
        """Sync what is queued, and answer those who waited for it."""
        self.feed.synced(self._journal.flush())
        self._journal.replenish()

    def close(self) -> None:
        """Let the files go."""
        self._journal.close()


def heap_bytes(kind: str, event_bytes: int, held: int, scale: Scale) -> Sample:
    """Heap bytes per held event, with so many held."""
    trace = shape(kind, held, scale.seed, events_per_s=10_000.0)
    cut = bodies(trace, cut_by_count(trace, scale.body_events), Style("ns", event_bytes))
    with tempfile.TemporaryDirectory(prefix="strandline-bench-") as folder:
        case = _OnDisk(Path(folder), max(2 << 30, 2 * held * (event_bytes + 200)))
        gc.collect()
        tracemalloc.start()
        try:
            before = tracemalloc.get_traced_memory()[0]
            for body in cut:
                case.take(body.payload, body.due_ns, body.number)
            case.settle()
            del body, cut
            gc.collect()
            now, _peak = tracemalloc.get_traced_memory()
        finally:
            tracemalloc.stop()
        if case.feed.state.runs.held != held:
            raise RuntimeError(f"{case.feed.state.runs.held} of {held} events are held: no figure would mean anything")
        runs = float(len(case.feed.state.runs.runs))
        case.close()
    return Sample((now - before) / held, {"open runs": runs})


def _prepare(kind: str, event_bytes: int, held: int, note: str, scale: Scale) -> Measure:
    return lambda: replace(heap_bytes(kind, event_bytes, held, scale), note=note)


def _has_room(event_bytes: int) -> bool:
    """Whether the journal of LARGE_HELD such events finds room on the disk."""
    needed = LARGE_HELD * (event_bytes + 60) + LEFT_FREE_BYTES
    return shutil.disk_usage(tempfile.gettempdir()).free > needed


def rows(scale: Scale) -> list[Row]:
    """A row for each payload, for a feed that is nearly in order and one that is not at all; 10^7 held with --full.

    Payloads for whose journal the disk has no room at 10^7 are left out there; a note in the other row says so.
    """
    name = "heap at {:,} held, {}, events of {:,} bytes"
    held = min(scale.held[-1], 1_000_000)
    found = [
        Row(
            name.format(held, kind, size), "bytes", partial(_prepare, kind, size, held, ""),
            rounds_at_most=2, warm=False,
        )
        for kind in ("exponential", "random_order")
        for size in PAYLOADS
    ]  # fmt: skip
    if not scale.full:
        return found
    lacking = [size for size in PAYLOADS if not _has_room(size)]
    note = "".join(f"not measured for want of disk: events of {size:,} bytes" for size in lacking)
    return found + [
        Row(
            name.format(LARGE_HELD, "exponential", size), "bytes",
            partial(_prepare, "exponential", size, LARGE_HELD, note), GOAL_BYTES, rounds_at_most=1, warm=False,
        )
        for size in PAYLOADS
        if size not in lacking
    ]  # fmt: skip
