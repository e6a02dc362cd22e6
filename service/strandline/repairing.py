"""Sending late events again: repairs on a schedule, and whatever an operator asks to have sent once more.

At least once, in numbered batches: which rows a run takes, and its first number, are durable before the first batch is
sent, so after a crash the same batches go out under the same numbers. Rows stay in the lane store until an operator
forgets them; nothing here removes late events.
"""

from __future__ import annotations

import asyncio
import contextlib
import logging
import random
from collections.abc import Awaitable, Callable, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path

from .backoff import backoff_s
from .core.columns import Batch, Lane
from .errors import SinkRefused, SinkRetry, StrandlineError
from .ports import Counting, Lines, Sink
from .sinks.lanes import ROWS_AT_MOST, LaneStore, late_rows, refused_rows
from .sinks.repairs import Repair, RepairRow, TakesRepairs, cut

log = logging.getLogger(__name__)
RUNS_AT_MOST = 1000  # of ROWS_AT_MOST rows each, in one resend


class WithoutLate:
    """A sink that is not given the late lane, because its late events are repaired or only kept."""

    def __init__(self, sink: Sink) -> None:
        self.sink = sink

    @property
    def lanes(self) -> tuple[Lane, ...]:
        """The sink's lanes but the late one."""
        return tuple(lane for lane in self.sink.lanes if lane != "late")

    @property
    def flush_after_s(self) -> float:
        """As the sink."""
        return self.sink.flush_after_s

    async def open(self) -> dict[Lane, int]:
        """As the sink; what it says of the late lane is passed over."""
        return {lane: number for lane, number in (await self.sink.open()).items() if lane != "late"}

    async def take(self, batches: Sequence[Batch], lines: Lines) -> dict[Lane, int]:
        """As the sink."""
        return await self.sink.take(batches, lines)

    async def flush(self, lines: Lines) -> dict[Lane, int]:
        """As the sink."""
        return await self.sink.flush(lines)

    async def close(self) -> None:
        """As the sink."""
        await self.sink.close()

    def counts(self) -> Mapping[str, int]:
        """As the sink, if it counts."""
        return self.sink.counts() if isinstance(self.sink, Counting) else {}


@dataclass(frozen=True, slots=True)
class RepairState:
    """What an observer sees of one sink's repairs. `through` is the number of the last late row that was sent."""

    through: int
    next_number: int
    running: bool
    refused_batches: int
    last_error: str | None


class Repairer:
    """Repairs of one feed into one sink. `every_s` None: only when an operator asks."""

    def __init__(
        self,
        name: str,
        sink: TakesRepairs,
        store: LaneStore,
        path: Path,
        *,
        every_s: float | None,
        partition_ns: int,
        random_source: random.Random,
        sleep: Callable[[float], Awaitable[None]] = asyncio.sleep,
    ) -> None:
        self.name = name
        self._sink, self._store, self._path = sink, store, path
        self._every_s, self._partition_ns = every_s, partition_ns
        self._random, self._sleep = random_source, sleep
        self._task: asyncio.Task[None] | None = None
        self._one_at_a_time = asyncio.Lock()
        self._going = asyncio.Event()
        self._going.set()
        self._state = RepairState(0, 1, False, 0, None)

    def start(self) -> None:
        """Begin the schedule, if there is one."""
        if self._every_s is not None and self._task is None:
            self._task = asyncio.create_task(self._schedule(self._every_s))

    async def close(self) -> None:
        """Stop at once; what was under way goes out again, under the same numbers, at the next start."""
        if self._task is not None:
            self._task.cancel()
            with contextlib.suppress(asyncio.CancelledError):
                await self._task

    def pause(self) -> None:
        """Send the sink nothing more, once it has answered what it works on."""
        self._going.clear()

    def resume(self) -> None:
        """Go on from there."""
        self._going.set()

    def state(self) -> RepairState:
        """What an observer sees now."""
        return self._state

    async def _schedule(self, every_s: float) -> None:
        while True:
            try:
                await self.run()
            except StrandlineError as error:
                log.warning("repairs into sink %s: %s", self.name, error)
            await self._sleep(every_s)

    async def run(self) -> int:
        """Send the late events that were not sent yet; how many."""
        sent = 0
        async with self._one_at_a_time:
            while True:
                plan = await self._store.plan_repair(self.name, ROWS_AT_MOST)
                self._note(through=plan.after, next_number=plan.number, running=plan.until > plan.after)
                if plan.until <= plan.after:
                    return sent
                rows = await asyncio.to_thread(late_repair_rows, self._path, plan.after, plan.until)
                repairs = cut(rows, self._partition_ns, plan.number)
                await self._send(repairs)
                await self._store.end_repair(self.name, plan.until, plan.number + len(repairs))
                sent += len(rows)

    async def resend(self, after: int, through: int) -> int:
        """Send late events with these numbers once more, under new numbers of batches; how many."""
        return await self._again(after, through, late_repair_rows)

    async def resend_refused(self, after: int, through: int) -> int:
        """Send what the sink refused once more, as repairs; how many. They stay listed until they are forgotten."""
        return await self._again(after, through, lambda path, a, t: refused_repair_rows(path, self.name, a, t))

    async def _again(self, after: int, through: int, read: Callable[[Path, int, int], list[RepairRow]]) -> int:
        sent = 0
        async with self._one_at_a_time:
            for _ in range(RUNS_AT_MOST):
                rows = await asyncio.to_thread(read, self._path, after, through)
                if not rows:
                    break
                unnumbered = cut(rows, self._partition_ns, 0)
                first = await self._store.take_repair_numbers(self.name, len(unnumbered))
                await self._send(cut(rows, self._partition_ns, first))
                sent, after = sent + len(rows), rows[-1].number
        return sent

    async def _send(self, repairs: Sequence[Repair]) -> None:
        for repair in repairs:
            attempts = 0
            while True:
                await self._going.wait()
                try:
                    await self._sink.repair(repair)
                    break
                except SinkRefused as error:
                    # The rows stay in the lane store: an operator sees the count, mends the store and has them resent.
                    log.warning("sink %s refused repair %d for good: %s", self.name, repair.number, error)
                    self._note(refused_batches=self._state.refused_batches + 1, last_error=str(error))
                    break
                except SinkRetry as error:
                    self._note(last_error=str(error))
                    await self._sleep(backoff_s(self._random, attempts, error.retry_after_s))
                    attempts += 1

    def _note(self, **changes: object) -> None:
        fields = {name: getattr(self._state, name) for name in RepairState.__slots__}
        self._state = RepairState(**{**fields, **changes})


def late_repair_rows(path: Path, after: int, through: int) -> list[RepairRow]:
    """Late events numbered above `after` up to `through`, ROWS_AT_MOST at most, ascending. Blocking."""
    found: list[RepairRow] = []
    while len(found) < ROWS_AT_MOST and after < through:
        rows = [row for row in late_rows(path, after, ROWS_AT_MOST - len(found)) if row.number <= through]
        if not rows:
            break
        after = rows[-1].number
        found += [
            RepairRow(row.number, row.time_ns, row.source, row.arrived_ns, row.late_by_ns, row.event.encode())
            for row in rows
        ]
    return found


def refused_repair_rows(path: Path, sink: str, after: int, through: int) -> list[RepairRow]:
    """What a sink refused, numbered above `after` up to `through`; lines in quarantine are none of it. Blocking."""
    rows = [row for row in refused_rows(path, after, ROWS_AT_MOST, sink) if row.number <= through]
    return [
        RepairRow(
            row.number,
            row.time_ns,
            row.source,
            row.instant_ns,
            max(0, (row.watermark_ns or row.time_ns) - row.time_ns),
            bytes(row.event),
        )
        for row in rows
        if row.time_ns is not None
    ]
