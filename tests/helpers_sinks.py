"""What tests of sinks share: event lines in memory, batches over them, and a time that only the test moves."""

from __future__ import annotations

import asyncio
import heapq
import itertools
import threading
from collections.abc import Sequence

import numpy as np
from strandline.core.columns import NO_SOURCE, REF, Batch, Lane, QuarantineEntry
from strandline.ports import Lines

START_NS = 1_777_000_000_000_000_000
LATE_BY_NS = 7_000_000_000


class HeldLines(Lines):
    """Lines out of a list: an event's place is its index. `fail_at` and `hold_at` name a batch at which to stop."""

    def __init__(self, names: Sequence[str] = ("gauge-1", "gauge-2", "gauge-3")) -> None:
        self.names = list(names)
        self.held: list[bytes] = []
        self.fail_at: int | None = None
        self.hold_at: int | None = None
        self.entered = threading.Event()
        self.go_on = threading.Event()

    def lines(self, batch: Batch) -> list[bytes]:
        self._stop(batch)
        places = [entry.place for entry in batch.entries] or batch.refs["place"].tolist()
        return [self.held[place] for place in places]

    def ndjson(self, batch: Batch) -> bytes:
        return b"".join(line + b"\n" for line in self.lines(batch))

    def source_names(self) -> Sequence[str]:
        return self.names

    def _stop(self, batch: Batch) -> None:
        if batch.number == self.fail_at:
            raise RuntimeError(f"the lines of batch {batch.number} cannot be read")
        if batch.number == self.hold_at:
            self.entered.set()
            assert self.go_on.wait(30)

    # ---- batches whose every event differs from every other ---------------------------------------------------------

    def batch(self, lane: Lane, number: int, rows: int, text: str = "Höhe 1\u2028") -> Batch:
        """A batch of any lane; times ascend from batch to batch."""
        return self.quarantine(number, rows) if lane == "quarantine" else self._rows(lane, number, rows, text)

    def batches(self, lane: Lane, numbers: Sequence[int], rows: int = 3) -> list[Batch]:
        """Several of them."""
        return [self.batch(lane, number, rows) for number in numbers]

    def _rows(self, lane: Lane, number: int, rows: int, text: str) -> Batch:
        refs = np.empty(rows, dtype=REF)
        for row in range(rows):
            event = f'{{"lane":"{lane}","batch":{number},"row":{row},"text":"{text}"}}'.encode()
            source = NO_SOURCE if row % 7 == 6 else row % len(self.names)
            refs[row] = (len(self.held), len(event), source)
            self.held.append(event)
        times = START_NS + number * 1_000_000_000 + np.arange(rows, dtype=np.int64)
        behind = START_NS + number * 1_000_000_000 + LATE_BY_NS
        return Batch(lane, number, times, refs, START_NS + number, number, behind)

    def quarantine(self, number: int, rows: int) -> Batch:
        """Lines that are no events: any bytes at all."""
        entries = []
        for row in range(rows):
            line = b"\xff\x00 \n" + f'{number}/{row} "'.encode()
            detail = f"line {row + 1}: no 'time'\n\0 in \"it\""
            entries.append(QuarantineEntry(row + 1, "malformed", detail, len(self.held), len(line)))
            self.held.append(line)
        none = np.empty(0, dtype=np.int64)
        return Batch("quarantine", number, none, np.empty(0, REF), START_NS + number, number, entries=entries)

    # ---- what must be found in a store ------------------------------------------------------------------------------

    def expected(self, batches: Sequence[Batch]) -> list[tuple[object, ...]]:
        """Ordered: (event). Late: (time, source, arrived, late by, event). Quarantine: (arrived, line, why, event)."""
        rows: list[tuple[object, ...]] = []
        for batch in batches:
            if batch.lane == "quarantine":
                rows += [(batch.instant_ns, e.line, e.reason, e.detail, self.held[e.place]) for e in batch.entries]
                continue
            for time, ref in zip(batch.times.tolist(), batch.refs, strict=True):
                event = self.held[ref["place"]]
                source = None if ref["source"] == NO_SOURCE else self.names[ref["source"]]
                late = (time, source, batch.instant_ns, batch.behind_ns - time, event)
                rows.append((event,) if batch.lane == "ordered" else late)
        return rows


class VirtualTime:
    """A clock and a sleep that stand still until the test calls `advance`."""

    def __init__(self, now_ns: int = START_NS) -> None:
        self.now = now_ns
        self.asked: list[float] = []
        self._sleepers: list[tuple[int, int, asyncio.Future[None]]] = []
        self._order = itertools.count()

    def now_ns(self) -> int:
        return self.now

    async def sleep(self, seconds: float) -> None:
        self.asked.append(seconds)
        waiter: asyncio.Future[None] = asyncio.get_running_loop().create_future()
        heapq.heappush(self._sleepers, (self.now + int(seconds * 1e9), next(self._order), waiter))
        await waiter

    async def advance(self, seconds: float) -> None:
        """Let time pass, one sleeper after the other, each followed by all that it sets off."""
        await settle()
        end = self.now + int(seconds * 1e9)
        while self._sleepers and self._sleepers[0][0] <= end:
            self.now, _, waiter = heapq.heappop(self._sleepers)
            if not waiter.done():
                waiter.set_result(None)
                await settle()
        self.now = end


async def settle() -> None:
    """Let everything run that can run without time: no chain of callbacks in these tests is longer than this."""
    for _ in range(200):
        await asyncio.sleep(0)
