"""What tests of delivery share: a sink that does what its script says, and one delivery with everything around it.

The sink keeps what it took like a real one; time and chance belong to the test.
"""

from __future__ import annotations

import asyncio
import random
from collections import deque
from collections.abc import AsyncIterator, Callable, Sequence
from contextlib import asynccontextmanager
from typing import Any

from helpers_sinks import HeldLines, VirtualTime, settle
from strandline.core.columns import Batch, Lane
from strandline.errors import SinkRefused, SinkRetry
from strandline.ports import Lines
from strandline.sinks.delivery import Delivery

Step = str | Exception | asyncio.Event


class ScriptedSink:
    """Each call of open, take or flush uses up one step of the script; without one it succeeds.

    "ok", an exception raised before anything is done, "kept" (does it, then raises), "buffer" (a take that makes
    nothing durable), or an event on which it hangs before it goes on. `never` are numbers that it refuses for good.
    """

    flush_after_s = 0.0

    def __init__(self, lanes: tuple[Lane, ...] = ("ordered", "late"), never: Sequence[int] = ()) -> None:
        self.lanes = lanes
        self.script: deque[Step] = deque()
        self.never = set(never)
        self.start: dict[Lane, int] | None = None
        self.durable: dict[Lane, list[int]] = {lane: [] for lane in lanes}
        self.buffer: list[Batch] = []
        self.calls: list[tuple[str, Lane | None, list[int]]] = []
        self.busy = self.closed = False
        self.watch: Callable[[], None] = lambda: None

    def _reached(self) -> dict[Lane, int]:
        return {lane: numbers[-1] if numbers else 0 for lane, numbers in self.durable.items()}

    async def open(self) -> dict[Lane, int]:
        await self._begin("open", None, [])
        return self._reached() if self.start is None else self.start

    async def take(self, batches: Sequence[Batch], lines: Lines) -> dict[Lane, int]:
        assert batches and len({batch.lane for batch in batches}) == 1
        step = await self._begin("take", batches[0].lane, [batch.number for batch in batches])
        refused = [batch.number for batch in batches if batch.number in self.never]
        if refused:
            raise SinkRefused("no room for those in this store", refused)
        for batch in batches:
            held = [each.number for each in self.buffer if each.lane == batch.lane]
            if batch.number > max(held, default=self._reached()[batch.lane]):
                self.buffer.append(batch)
        return self._end("buffer" if step == "buffer" else step)

    async def flush(self, lines: Lines) -> dict[Lane, int]:
        return self._end(await self._begin("flush", None, []))

    async def close(self) -> None:
        self.closed = True

    async def _begin(self, what: str, lane: Lane | None, numbers: list[int]) -> Step:
        assert not self.busy, "calls never overlap"
        self.calls.append((what, lane, numbers))
        self.watch()
        step: Step = self.script.popleft() if self.script else "ok"
        if isinstance(step, asyncio.Event):
            self.busy = True
            try:
                await step.wait()
            finally:
                self.busy = False
        if isinstance(step, Exception):
            self.buffer.clear()  # a sink may lose what it held when it fails
            raise step
        return step

    def _end(self, step: Step) -> dict[Lane, int]:
        if step != "buffer":
            for batch in self.buffer:
                self.durable[batch.lane].append(batch.number)
            self.buffer.clear()
        if step == "kept":
            raise SinkRetry("the answer was lost on its way")
        return self._reached()


SEED = 20_260_501


class Desk:
    """One delivery with everything around it."""

    def __init__(self, sink: ScriptedSink, **options: Any) -> None:
        self.sink = sink
        self.time = VirtualTime()
        self.lines = HeldLines()
        self.taken: list[tuple[Lane, int]] = []
        self.refused: list[tuple[list[int], str]] = []
        self.refusing: list[Exception] = []
        self.delivery = Delivery(
            "river-store",
            sink,
            self.lines,
            clock=self.time,
            random_source=random.Random(SEED),
            on_taken=lambda name, lane, number: self.taken.append((lane, number)),
            on_refused=self._refused,
            sleep=self.time.sleep,
            **options,
        )
        sink.watch = self.delivery.check

    async def _refused(self, name: str, batches: Sequence[Batch], detail: str) -> None:
        if self.refusing:
            raise self.refusing.pop(0)
        self.refused.append(([batch.number for batch in batches], detail))

    def offer(self, lane: Lane, *numbers: int, rows: int = 2) -> None:
        for number in numbers:
            self.delivery.offer(self.lines.batch(lane, number, rows))
            self.delivery.check()

    async def settled(self) -> None:
        await settle()
        self.delivery.check()

    @property
    def takes(self) -> list[tuple[Lane | None, list[int]]]:
        return [(lane, numbers) for what, lane, numbers in self.sink.calls if what == "take"]


@asynccontextmanager
async def desk(sink: ScriptedSink | None = None, *, started: bool = True, **options: Any) -> AsyncIterator[Desk]:
    made = Desk(sink or ScriptedSink(), **options)
    if started:
        made.delivery.start()
    await made.settled()
    try:
        yield made
        made.delivery.check()
    finally:
        await made.delivery.close()
    assert made.sink.closed


async def with_time(at: Desk, call: Any, seconds: float) -> Any:
    """The call's result, while time passes."""
    task = asyncio.ensure_future(call)
    await at.time.advance(seconds)
    return await task


def batches_left(left: dict[Lane, Any]) -> dict[Lane, int]:
    return {lane: state.batches for lane, state in left.items()}
