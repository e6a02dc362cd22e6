"""Delivery: one worker per sink and feed that hands released batches to the sink until they are durable there.

It decides when to call the sink, how long to wait after an error, and what an observer sees. What waits is kept by
`waiting`; how much may wait is bounded by the core, which releases nothing more at its limit. No ordering, no store.
"""

from __future__ import annotations

import asyncio
import logging
import random
from collections.abc import Awaitable, Callable, Coroutine, Mapping, Sequence
from dataclasses import dataclass
from typing import Any, TypeVar

from ..backoff import backoff_s
from ..core.columns import Batch, Lane
from ..errors import SinkRefused, SinkRetry
from ..ports import Clock, Counting, Lines, Sink
from ..tasks import ended, first_of
from .rows import rows_of
from .waiting import LaneState, Waiting

Result = TypeVar("Result")
OnTaken = Callable[[str, Lane, int], None]
OnOpened = Callable[[str, Mapping[Lane, int]], None]
OnRefused = Callable[[str, Sequence[Batch], str], Awaitable[None]]
Sleep = Callable[[float], Coroutine[Any, Any, None]]

GROUP_EVENTS_AT_MOST = 50_000
GROUP_BYTES_AT_MOST = 32 * 1024 * 1024
CLOSE_AT_MOST_S = 5.0

logger = logging.getLogger(__name__)


@dataclass(frozen=True, slots=True)
class DeliveryState:
    """What an observer sees of one sink. Times in ns since 1970 UTC."""

    sink: str
    lanes: dict[Lane, LaneState]
    running: bool
    opened: bool
    paused: bool
    calling: str | None  # "open", "take" or "flush" while the sink works on it
    calling_since_ns: int | None
    failing_since_ns: int | None  # None while all is well
    last_error: str | None  # kept after recovery
    retries: int
    counts: dict[str, int]  # of a sink that counts: samples by reason


class Delivery:
    """Hands one feed's batches to one sink, in order, retrying for ever, and reports what is durable.

    on_taken(sink, lane, number) is called on the loop once a lane is settled up to `number`: durable, or refused and
    handed over. on_refused(sink, batches, detail) must keep the batches for a later resend; only when it returns are
    they settled (an error there is retried like one of the sink). Of a batch that the sink has in part it is given only
    the refused rows. After a crash a refused batch can be offered, and refused, again: its number tells. `remembered`
    are the journal's positions, used for lanes that the store itself cannot know. `moves`: instances deliver
    the feed in turn, and some stores are an instance's own. `sleep` and `random_source` are passed in, so that a test
    owns time and chance.
    """

    def __init__(
        self,
        name: str,
        sink: Sink,
        lines: Lines,
        *,
        clock: Clock,
        random_source: random.Random,
        on_taken: OnTaken,
        on_refused: OnRefused,
        on_opened: OnOpened | None = None,
        remembered: Mapping[Lane, int] | None = None,
        moves: bool = False,
        sleep: Sleep = asyncio.sleep,
        group_events_at_most: int = GROUP_EVENTS_AT_MOST,
        group_bytes_at_most: int = GROUP_BYTES_AT_MOST,
    ) -> None:
        self.name = name
        self._sink, self._lines, self._clock, self._random, self._sleep = sink, lines, clock, random_source, sleep
        self._on_taken, self._on_refused, self._on_opened = on_taken, on_refused, on_opened
        self._remembered, self._moves = dict(remembered or {}), moves
        self._group_events_at_most, self._group_bytes_at_most = group_events_at_most, group_bytes_at_most
        self._counting = sink if isinstance(sink, Counting) else None  # asked once: it takes 13 us
        self._waiting = Waiting(sink.lanes)
        self._reported: dict[Lane, int] = dict.fromkeys(sink.lanes, 0)
        self._worker: asyncio.Task[None] | None = None
        self._flush_timer: asyncio.Task[None] | None = None
        self._wake = asyncio.Event()
        self._emptied = asyncio.Event()
        self._hurried = False
        self._opened = self._paused = self._draining = self._urged = self._flush_due = self._backing_off = False
        self._calling: tuple[str, int] | None = None
        self._attempts = self._retries = 0
        self._failing_since_ns: int | None = None
        self._last_error: str | None = None

    # ---- what the shell calls -------------------------------------------------------------------------------------

    def start(self) -> None:
        """Begin to open the sink and to deliver; returns at once."""
        if self._worker is None:
            self._worker = asyncio.get_running_loop().create_task(self._work(), name=f"delivery to {self.name}")

    def offer(self, batch: Batch) -> bool:
        """Deliver this batch, after those of its lane that were offered before. False: nothing to do for this sink."""
        if not self._waiting.offer(batch):
            return False
        self._emptied.clear()
        if not self._backing_off:
            self._wake.set()
        return True

    @property
    def lanes(self) -> tuple[Lane, ...]:
        """The lanes that the sink takes."""
        return self._waiting.lanes

    @property
    def flush_after_s(self) -> float:
        """How long the sink may hold what is not durable before it is asked to flush."""
        return self._sink.flush_after_s

    def pause(self) -> None:
        """Call the sink no more, once it has finished what it works on. What is offered waits."""
        self._paused = True
        self._wake.set()

    def resume(self) -> None:
        """Call the sink again, at once, also when it was to be left alone for a while after an error."""
        self._paused = False
        self._urge()

    async def drain(self, deadline_s: float) -> dict[Lane, LaneState]:
        """Deliver what is queued and flush, within `deadline_s`. Returns the lanes in which something is left.

        A sink that is paused is left alone.
        """
        self._draining = True
        self._urge()
        try:
            if self.state().running and not self._paused and not self._waiting.empty and not self._hurried:
                self._emptied.clear()
                await first_of(self._emptied.wait(), self._sleep(deadline_s))
        finally:
            self._draining = False
        return {lane: state for lane, state in self._waiting.state().items() if state.batches}

    def hurry(self) -> None:
        """End a drain that is under way; one that comes later does not wait."""
        self._hurried = True
        self._emptied.set()

    def _urge(self) -> None:
        """Try at once: a rest after an error ends, and a call that fails now is followed by no rest."""
        self._urged = True
        self._wake.set()

    async def close(self) -> None:
        """Stop at once and release the sink; what is not durable is offered again after the next start."""
        for task in (self._worker, self._flush_timer):
            if task is not None:
                await ended(task)
        closing = asyncio.ensure_future(self._sink.close())
        await first_of(asyncio.shield(closing), self._sleep(CLOSE_AT_MOST_S))
        if not closing.done():
            logger.warning("sink %s does not close within %s s; it is left as it is", self.name, CLOSE_AT_MOST_S)
            closing.cancel()
        elif not closing.cancelled() and closing.exception() is not None:
            logger.warning("sink %s could not be closed", self.name, exc_info=closing.exception())

    @property
    def failing(self) -> bool:
        """Whether the sink's last call failed; a hundredth of the price of `state`."""
        return self._failing_since_ns is not None

    def state(self) -> DeliveryState:
        """What an observer sees now."""
        return DeliveryState(
            sink=self.name,
            lanes=self._waiting.state(),
            running=self._worker is not None and not self._worker.done(),
            opened=self._opened,
            paused=self._paused,
            calling=self._calling[0] if self._calling else None,
            calling_since_ns=self._calling[1] if self._calling else None,
            failing_since_ns=self._failing_since_ns,
            last_error=self._last_error,
            retries=self._retries,
            counts=dict(self._counting.counts()) if self._counting is not None else {},
        )

    def check(self) -> None:
        """Assert the invariants of what waits, of what was reported, and that a worker never ends by itself."""
        self._waiting.check()
        for lane, number in self._reported.items():
            assert number <= self._waiting.reached(lane)
        assert self._opened or not self._waiting.holding
        assert (self._failing_since_ns is None) == (self._attempts == 0)
        assert self._worker is None or not self._worker.done() or self._worker.cancelled()

    # ---- the worker -----------------------------------------------------------------------------------------------

    async def _work(self) -> None:
        while True:
            try:
                if not await self._step():
                    await self._rest(None)
            except Exception as error:
                await self._back_off(error)

    async def _step(self) -> bool:
        """Do one thing; False when there is nothing to do until something wakes the worker."""
        self._report()
        if self._paused:
            return False
        if not self._opened:
            await self._open()
        elif self._waiting.holding and (self._flush_due or (self._waiting.idle and self._flush_when_idle)):
            await self._flush()
        elif group := self._waiting.group(self._group_events_at_most, self._group_bytes_at_most):
            await self._take(group)
        else:
            return False
        return True

    @property
    def _flush_when_idle(self) -> bool:
        return self._draining or self._sink.flush_after_s <= 0

    async def _open(self) -> None:
        positions = await self._call("open", self._sink.open())
        if self._on_opened:
            self._on_opened(self.name, positions)
        for lane in self._waiting.lanes:
            remembered = self._remembered.get(lane, 0)
            number = positions.get(lane, remembered)
            if number < remembered:
                why = "a former owner has a store of its own" if self._moves else "its store was replaced or restored"
                logger.log(
                    logging.INFO if self._moves else logging.WARNING,
                    "sink %s stands at batch %d of lane %s, but had taken up to %d: %s; what the journal still has is "
                    "delivered again",
                    *(self.name, number, lane, remembered, why),
                )
            self._waiting.advance(lane, number, self._clock.now_ns())
        self._opened = True
        self._advanced()

    async def _take(self, group: Sequence[Batch]) -> None:
        try:
            answer = await self._call("take", self._sink.take(group, self._lines))
        except SinkRefused as refusal:
            await self._refuse(group, refusal)
            return
        self._waiting.took(group)
        self._advance(answer)

    async def _flush(self) -> None:
        self._flush_due = False
        self._advance(await self._call("flush", self._sink.flush(self._lines)))
        if self._waiting.holding:
            raise SinkRetry("the sink flushed, but does not say that all it had taken is durable")

    async def _refuse(self, group: Sequence[Batch], refusal: SinkRefused) -> None:
        refused = [batch for batch in group if batch.number in refusal.numbers]
        if not refused:
            raise SinkRetry(f"the sink refused batches that were not offered: {refusal}") from refusal
        logger.warning("sink %s refused %d batches for good: %s", self.name, len(refused), refusal)
        parts = [rows_of(batch, refusal.rows.get(batch.number)) for batch in refused]
        await self._on_refused(self.name, parts, str(refusal))
        self._last_error = str(refusal)
        self._waiting.again()
        self._waiting.refuse(refused, self._clock.now_ns(), {part.number: len(part) for part in parts})
        self._set_flush_timer(anew=True)
        self._advanced()

    async def _call(self, what: str, call: Awaitable[Result]) -> Result:
        self._calling = (what, self._clock.now_ns())
        self._urged = False
        try:
            return await call
        finally:
            self._calling = None

    def _advance(self, answer: Mapping[Lane, int]) -> None:
        now_ns = self._clock.now_ns()
        moved = [self._waiting.advance(lane, number, now_ns) for lane, number in answer.items()]
        if any(moved):
            self._advanced()
        self._set_flush_timer(anew=any(moved))

    def _advanced(self) -> None:
        """Something is settled, so the store works again."""
        self._recovered()
        self._report()

    def _recovered(self) -> None:
        if self._failing_since_ns is not None:
            failed_s = (self._clock.now_ns() - self._failing_since_ns) / 1e9
            logger.warning("sink %s works again after %.1f s", self.name, failed_s)
        self._attempts = 0
        self._failing_since_ns = None

    def _report(self) -> None:
        for lane, reported in self._reported.items():
            reached = self._waiting.reached(lane)
            if reached > reported:
                self._on_taken(self.name, lane, reached)
                self._reported[lane] = reached
        if self._opened and self._waiting.empty:
            self._recovered()
            self._emptied.set()

    # ---- waiting --------------------------------------------------------------------------------------------------

    async def _back_off(self, error: Exception) -> None:
        """Wait before the next try; where the store names a time, at least that long."""
        self._waiting.again()
        self._set_flush_timer(anew=True)
        asked_s = error.retry_after_s if isinstance(error, SinkRetry) else None
        delay_s = backoff_s(self._random, self._attempts, asked_s)
        self._attempts += 1
        self._retries += 1
        self._last_error = str(error) or type(error).__name__
        if self._failing_since_ns is None:
            self._failing_since_ns = self._clock.now_ns()
        unexpected = None if isinstance(error, SinkRetry) else error
        text = "sink %s: %s; batches wait, next try in %.1f s"
        logger.warning(text, self.name, self._last_error, delay_s, exc_info=unexpected)
        if self._urged:
            return
        self._backing_off = True
        try:
            await self._rest(delay_s)
        finally:
            self._backing_off = False

    async def _rest(self, at_most_s: float | None) -> None:
        """Until something wakes the worker, or the time is over."""
        self._wake.clear()
        if at_most_s is None:
            await self._wake.wait()
        else:
            await first_of(self._wake.wait(), self._sleep(at_most_s))

    def _set_flush_timer(self, *, anew: bool) -> None:
        """A timer runs while the sink holds something that is not durable, and begins anew when something became so."""
        if self._flush_timer is not None and (anew or not self._waiting.holding):
            self._flush_timer.cancel()
            self._flush_timer = None
            self._flush_due = False
        if self._flush_timer is None and self._waiting.holding and self._sink.flush_after_s > 0:
            self._flush_timer = asyncio.get_running_loop().create_task(self._flush_later())

    async def _flush_later(self) -> None:
        await self._sleep(self._sink.flush_after_s)
        self._flush_due = True
        self._wake.set()
