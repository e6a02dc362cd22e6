"""Delivery, with a sink that refuses, hangs, fails, or takes and then fails; time and chance belong to the test."""

from __future__ import annotations

import asyncio
import logging
import random
from collections.abc import AsyncIterator, Sequence
from contextlib import asynccontextmanager
from typing import Any

import pytest
from helpers_delivery import ScriptedSink
from helpers_sinks import START_NS, HeldLines, VirtualTime, settle
from strandline.core.columns import Batch, Lane
from strandline.errors import SinkRefused, SinkRetry
from strandline.sinks.delivery import Delivery

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


# ---- grouping and order ---------------------------------------------------------------------------------------------


async def test_what_waits_is_taken_in_groups_of_one_lane() -> None:
    async with desk(started=False, group_events_at_most=10) as at:
        at.offer("ordered", 1, 2, rows=4)
        at.offer("late", 1, rows=1)
        at.offer("ordered", 3, 4, rows=4)
        at.delivery.start()
        await at.settled()
        assert at.takes == [("ordered", [1, 2]), ("late", [1]), ("ordered", [3, 4])]
        assert at.taken == [("ordered", 2), ("late", 1), ("ordered", 4)]


async def test_a_group_is_bounded_in_events_and_in_bytes_but_never_empty() -> None:
    async with desk(started=False, group_events_at_most=5) as at:
        at.offer("ordered", 1, rows=9)
        at.offer("ordered", 2, 3, 4, rows=2)
        at.delivery.start()
        await at.settled()
        assert at.takes == [("ordered", [1]), ("ordered", [2, 3]), ("ordered", [4])]
    async with desk(started=False, group_bytes_at_most=250) as at:
        at.offer("ordered", 1, 2, 3, 4, rows=2)  # about 110 bytes each
        at.delivery.start()
        await at.settled()
        assert at.takes == [("ordered", [1, 2]), ("ordered", [3, 4])]


async def test_neither_lane_starves_the_other() -> None:
    async with desk(started=False, group_events_at_most=2) as at:
        at.offer("ordered", *range(1, 6))
        at.offer("late", *range(1, 6))
        at.delivery.start()
        await at.settled()
        lanes = [lane for lane, _ in at.takes]
        assert lanes.count("late") == lanes.count("ordered") == 5
        assert lanes[:4].count("late") == 2  # by their place in the journal, not lane after lane


async def test_what_is_not_for_this_sink_or_was_offered_before_is_left_out() -> None:
    async with desk(ScriptedSink(("ordered",))) as at:
        assert not at.delivery.offer(at.lines.batch("late", 1, 1))
        assert not at.delivery.offer(at.lines.batch("quarantine", 1, 1))
        assert at.delivery.offer(at.lines.batch("ordered", 2, 1))
        assert not at.delivery.offer(at.lines.batch("ordered", 2, 1))
        await at.settled()
        assert not at.delivery.offer(at.lines.batch("ordered", 1, 1))
        assert at.takes == [("ordered", [2])]


# ---- positions ------------------------------------------------------------------------------------------------------


async def test_what_the_store_holds_already_is_not_delivered_again() -> None:
    sink = ScriptedSink()
    sink.durable["ordered"] = [3]
    async with desk(sink, started=False, remembered={"ordered": 1}) as at:
        at.offer("ordered", 2, 3, 4)
        at.delivery.start()
        await at.settled()
        assert at.takes == [("ordered", [4])]
        assert at.taken == [("ordered", 3), ("ordered", 4)]


async def test_the_journals_memory_serves_where_the_store_cannot_know() -> None:
    sink = ScriptedSink()
    sink.start = {"late": 0}
    async with desk(sink, started=False, remembered={"ordered": 2, "late": 5}) as at:
        at.offer("ordered", 1, 2, 3)
        at.offer("late", 1)
        at.delivery.start()
        await at.settled()
        assert sorted(at.takes) == [("late", [1]), ("ordered", [3])]


async def test_a_store_that_went_back_is_named(caplog: pytest.LogCaptureFixture) -> None:
    async with desk(ScriptedSink(), remembered={"ordered": 7}):
        assert "stands at batch 0 of lane ordered, but had taken up to 7" in caplog.text


# ---- trouble --------------------------------------------------------------------------------------------------------


async def test_backing_off_is_full_jitter_below_a_doubling_bound() -> None:
    # M. Brooker, "Exponential Backoff And Jitter", AWS Architecture Blog, 2015 (from memory):
    # sleep = random_between(0, min(cap, base * 2 ** attempt)), here with base 0.1 s and cap 30 s.
    sink = ScriptedSink()
    async with desk(sink) as at:
        sink.script.extend(SinkRetry("the store is down") for _ in range(14))
        at.offer("ordered", 1)
        await at.time.advance(600)
        chance = random.Random(SEED)
        assert at.time.asked == [chance.uniform(0, min(30.0, 0.1 * 2**attempt)) for attempt in range(14)]
        assert at.takes == [("ordered", [1])] * 15
        assert at.taken == [("ordered", 1)]


async def test_backing_off_begins_anew_after_success_and_never_ends() -> None:
    sink = ScriptedSink()
    async with desk(sink) as at:
        for number in (1, 2):
            sink.script.extend(SinkRetry("down") for _ in range(200))
            at.offer("ordered", number)
            before = len(at.time.asked)
            await at.time.advance(200 * 30)
            assert at.taken[-1] == ("ordered", number)
            assert all(seconds <= 0.1 for seconds in at.time.asked[before : before + 1])
            assert max(at.time.asked) <= 30
        assert at.delivery.state().retries == 400


@pytest.mark.parametrize(("named", "waited"), [(7.0, 7.0), (1e9, 3600.0), (0.0, None), (-5.0, None), (float("nan"), None)])
async def test_a_time_that_the_store_names_is_honoured(named: float, waited: float | None) -> None:
    sink = ScriptedSink()
    async with desk(sink) as at:
        sink.script.append(SinkRetry("busy", retry_after_s=named))
        at.offer("ordered", 1)
        await at.settled()
        jitter = random.Random(SEED).uniform(0, 0.1)
        assert at.time.asked == [jitter if waited is None else waited]
        await at.time.advance(at.time.asked[0] + 0.001)
        assert at.taken == [("ordered", 1)]


async def test_any_other_exception_is_retried_and_logged_with_its_cause(caplog: pytest.LogCaptureFixture) -> None:
    sink = ScriptedSink()
    async with desk(sink) as at:
        sink.script.append(ZeroDivisionError("a fault in the sink"))
        at.offer("ordered", 1)
        await at.time.advance(1)
        assert at.taken == [("ordered", 1)]
    record = next(record for record in caplog.records if "a fault in the sink" in record.getMessage())
    assert record.exc_info and record.exc_info[0] is ZeroDivisionError


async def test_a_sink_that_takes_and_then_fails_holds_it_once() -> None:
    sink = ScriptedSink()
    async with desk(sink) as at:
        sink.script.extend(["kept", "kept"])
        at.offer("ordered", 1, 2)
        await at.time.advance(1)
        at.offer("ordered", 3)
        await at.time.advance(1)
        assert sink.durable["ordered"] == [1, 2, 3]
        assert at.taken[-1] == ("ordered", 3)


async def test_a_store_that_is_down_at_the_start_is_opened_later() -> None:
    sink = ScriptedSink()
    sink.script.extend([SinkRetry("not there yet"), OSError("neither now")])
    async with desk(sink) as at:
        at.offer("ordered", 1)
        assert not at.delivery.state().opened
        await at.time.advance(1)
        assert at.delivery.state().opened
        assert at.taken == [("ordered", 1)]


async def test_an_offer_does_not_shorten_the_rest_after_an_error() -> None:
    sink = ScriptedSink()
    async with desk(sink) as at:
        sink.script.append(SinkRetry("down", retry_after_s=20))
        at.offer("ordered", 1)
        await at.settled()
        at.offer("ordered", 2, 3)
        await at.time.advance(19.9)
        assert len(at.takes) == 1
        await at.time.advance(0.2)
        assert at.takes[1:] == [("ordered", [1, 2, 3])]


async def test_a_hanging_sink_is_seen_and_blocks_only_itself() -> None:
    sink = ScriptedSink()
    async with desk(sink) as at:
        hang = asyncio.Event()
        sink.script.append(hang)
        at.offer("ordered", 1)
        await at.settled()
        await at.time.advance(90)
        at.offer("ordered", 2)
        state = at.delivery.state()
        assert (state.calling, state.calling_since_ns) == ("take", START_NS)
        assert state.lanes["ordered"].batches == 2
        assert batches_left(await with_time(at, at.delivery.drain(5.0), 5.0)) == {"ordered": 2}
        hang.set()
        await at.settled()
        assert at.takes == [("ordered", [1]), ("ordered", [2])]
        assert at.delivery.state().calling is None


async def test_a_hanging_sink_does_not_keep_the_service_from_stopping(caplog: pytest.LogCaptureFixture) -> None:
    class Hanging(ScriptedSink):
        async def close(self) -> None:
            await asyncio.Event().wait()

    sink = Hanging()
    at = Desk(sink)
    sink.script.append(asyncio.Event())
    at.delivery.start()
    await settle()
    await with_time(at, at.delivery.close(), 5.0)
    assert "does not close within 5.0 s" in caplog.text


async def test_a_sink_that_cannot_be_closed_is_logged(caplog: pytest.LogCaptureFixture) -> None:
    class Broken(ScriptedSink):
        async def close(self) -> None:
            raise OSError("already gone")

    at = Desk(Broken())
    at.delivery.start()
    await settle()
    await at.delivery.close()
    assert "could not be closed" in caplog.text and "already gone" in caplog.text


async def with_time(at: Desk, call: Any, seconds: float) -> Any:
    """The call's result, while time passes."""
    task = asyncio.ensure_future(call)
    await at.time.advance(seconds)
    return await task


def batches_left(left: dict[Lane, Any]) -> dict[Lane, int]:
    return {lane: state.batches for lane, state in left.items()}


# ---- refusals -------------------------------------------------------------------------------------------------------


async def test_refused_batches_are_handed_over_and_progress_goes_on() -> None:
    sink = ScriptedSink(never=[2, 5])
    async with desk(sink, started=False) as at:
        at.offer("ordered", 1, 2, 3, 4, 5)
        at.delivery.start()
        await at.settled()
        assert at.refused == [([2, 5], "no room for those in this store")]
        assert sink.durable["ordered"] == [1, 3, 4]
        assert at.taken == [("ordered", 5)]
        lane = at.delivery.state().lanes["ordered"]
        assert (lane.refused_batches, lane.refused_events) == (2, 4)
        assert (lane.delivered_batches, lane.delivered_events) == (3, 6)
        assert at.delivery.state().retries == 0
        assert at.time.asked == []


async def test_a_refused_batch_settles_only_after_those_before_it() -> None:
    sink = ScriptedSink(never=[2])
    async with desk(sink, started=False) as at:
        at.offer("ordered", 1, 2)
        sink.script.extend(["ok", "ok", SinkRetry("down", 5)])  # open, the refusing take, the take of batch 1
        at.delivery.start()
        await at.settled()
        assert at.refused and at.taken == []
        await at.time.advance(6)
        assert at.taken == [("ordered", 2)]


async def test_refused_batches_that_cannot_be_kept_are_refused_again() -> None:
    sink = ScriptedSink(never=[1])
    async with desk(sink) as at:
        at.refusing = [OSError("no room to keep them")]
        at.offer("ordered", 1)
        await at.settled()
        assert at.taken == [] and "no room to keep them" in str(at.delivery.state().last_error)
        await at.time.advance(1)
        assert at.refused and at.taken == [("ordered", 1)]


async def test_refusing_what_was_not_offered_is_an_error_of_the_sink() -> None:
    class Confused(ScriptedSink):
        async def take(self, batches: Sequence[Batch], lines: Any) -> dict[Lane, int]:
            if not at.delivery.state().retries:
                raise SinkRefused("no", [99])
            return await super().take(batches, lines)

    async with desk(Confused()) as at:
        at.offer("ordered", 1)
        await at.time.advance(1)
        assert at.refused == [] and at.taken == [("ordered", 1)]
        assert at.delivery.state().retries == 1


# ---- flushing -------------------------------------------------------------------------------------------------------


async def test_a_buffering_sink_is_flushed_as_soon_as_nothing_waits() -> None:
    sink = ScriptedSink()
    async with desk(sink, started=False, group_events_at_most=2) as at:
        sink.script.extend(["ok", "buffer", "buffer"])
        at.offer("ordered", 1, 2)
        at.delivery.start()
        await at.settled()
        assert [what for what, _, _ in sink.calls] == ["open", "take", "take", "flush"]
        assert at.taken == [("ordered", 2)]


class Rolling(ScriptedSink):
    flush_after_s = 10.0


async def test_a_rolling_sink_is_flushed_at_its_age_busy_or_not() -> None:
    sink = Rolling()
    async with desk(sink, group_events_at_most=2) as at:
        sink.script.extend(["buffer"] * 50)
        at.offer("ordered", 1)
        for number in range(2, 12):
            await at.time.advance(0.99)
            at.offer("ordered", number)
        await at.settled()
        assert at.taken == []
        sink.script.clear()  # the flush that comes now succeeds
        await at.time.advance(0.2)
        assert at.taken == [("ordered", 11)]
        assert sink.calls[-1][0] == "flush"
        before = len(sink.calls)
        await at.time.advance(60)
        assert len(sink.calls) == before  # nothing is held, so there is nothing to flush


async def test_the_age_counts_from_what_is_held_now() -> None:
    sink = Rolling()
    async with desk(sink) as at:
        sink.script.append("buffer")
        at.offer("ordered", 1)
        await at.time.advance(6)
        at.offer("ordered", 2)  # the sink rolls by size: all is durable
        await at.settled()
        assert at.taken == [("ordered", 2)]
        sink.script.append("buffer")
        at.offer("ordered", 3)
        await at.time.advance(9.9)
        assert at.taken == [("ordered", 2)]
        await at.time.advance(0.2)
        assert at.taken == [("ordered", 2), ("ordered", 3)]


async def test_a_failed_flush_offers_everything_again() -> None:
    sink = Rolling()
    async with desk(sink) as at:
        sink.script.extend(["buffer", "buffer", SinkRetry("the disk is full")])
        at.offer("ordered", 1)
        await at.settled()
        at.offer("late", 1)
        await at.time.advance(11)
        assert at.taken[-2:] and set(at.taken) == {("ordered", 1), ("late", 1)}
        assert sink.durable == {"ordered": [1], "late": [1]}
        assert [what for what, _, _ in sink.calls] == ["open", "take", "take", "flush", "take", "take"]


async def test_a_flush_that_leaves_something_is_an_error_of_the_sink() -> None:
    sink = ScriptedSink()
    async with desk(sink) as at:
        sink.script.extend(["buffer", "buffer"])
        at.offer("ordered", 1)
        await at.settled()
        assert at.delivery.state().retries == 1
        assert "does not say that all it had taken is durable" in str(at.delivery.state().last_error)
        await at.time.advance(1)
        assert at.taken == [("ordered", 1)]


# ---- operating ------------------------------------------------------------------------------------------------------


async def test_pausing_and_resuming() -> None:
    sink = ScriptedSink()
    async with desk(sink) as at:
        at.delivery.pause()
        at.offer("ordered", 1, 2)
        await at.time.advance(100)
        assert at.takes == [] and at.delivery.state().paused
        assert batches_left(await at.delivery.drain(50)) == {"ordered": 2}  # left alone, at once
        at.delivery.resume()
        await at.settled()
        assert at.taken == [("ordered", 2)] and not at.delivery.state().paused


async def test_resuming_tries_at_once() -> None:
    sink = ScriptedSink()
    async with desk(sink) as at:
        sink.script.append(SinkRetry("maintenance", 1800))
        at.offer("ordered", 1)
        await at.settled()
        at.delivery.resume()
        await at.settled()
        assert at.taken == [("ordered", 1)]


async def test_a_drain_delivers_and_flushes() -> None:
    sink = Rolling()
    async with desk(sink, group_events_at_most=2) as at:
        sink.script.extend(["buffer", "buffer", "buffer"])
        at.offer("ordered", 1, 2, 3)
        assert await at.delivery.drain(5.0) == {}
        assert at.taken == [("ordered", 3)]
        assert sink.calls[-1][0] == "flush"
        assert await at.delivery.drain(5.0) == {}  # nothing to do is done at once


async def test_a_drain_does_not_wait_out_a_rest_and_ends_at_its_deadline() -> None:
    sink = ScriptedSink()
    async with desk(sink) as at:
        sink.script.extend([SinkRetry("down", 1000)] * 2)
        at.offer("ordered", 1)
        at.offer("late", 1, 2)
        await at.settled()
        left = await with_time(at, at.delivery.drain(5.0), 5.0)
        assert batches_left(left) == {"ordered": 1, "late": 2}
        assert len(at.takes) == 2
        assert left["late"].events == 4


async def test_a_drain_during_a_call_that_then_fails_tries_at_once() -> None:
    sink = ScriptedSink()
    async with desk(sink) as at:

        class Late(asyncio.Event):
            async def wait(self) -> Any:
                await super().wait()
                raise SinkRetry("down", 1000)

        hang = Late()
        sink.script.append(hang)
        at.offer("ordered", 1)
        await at.settled()
        draining = asyncio.ensure_future(at.delivery.drain(5.0))
        await at.settled()
        hang.set()
        await at.settled()
        assert at.taken == [("ordered", 1)]
        await at.time.advance(5.0)
        assert await draining == {}


async def test_what_an_observer_sees() -> None:
    sink = ScriptedSink()
    async with desk(sink) as at:
        sink.script.extend([SinkRetry("the store is down", 8), SinkRetry("still down", 8)])
        await at.time.advance(1)
        at.offer("ordered", 1, 2)
        await at.time.advance(9)
        state = at.delivery.state()
        assert (state.sink, state.running, state.opened, state.retries) == ("river-store", True, True, 2)
        assert (state.failing_since_ns, state.last_error) == (START_NS + 1_000_000_000, "still down")
        lane = state.lanes["ordered"]
        assert (lane.batches, lane.events, lane.oldest_instant_ns) == (2, 4, START_NS + 1)
        assert (lane.reached, lane.advanced_at_ns) == (0, None)
        await at.time.advance(8)
        state = at.delivery.state()
        lane = state.lanes["ordered"]
        assert (state.failing_since_ns, state.last_error, state.retries) == (None, "still down", 2)
        assert (lane.batches, lane.events, lane.oldest_instant_ns, lane.reached) == (0, 0, None, 2)
        assert lane.advanced_at_ns == START_NS + 17_000_000_000
        assert state.lanes["late"].advanced_at_ns is None


async def test_a_report_that_fails_is_made_again(caplog: pytest.LogCaptureFixture) -> None:
    sink = ScriptedSink()
    at = Desk(sink)
    failing = [OSError("the journal is busy")]
    reported: list[int] = []

    def on_taken(name: str, lane: Lane, number: int) -> None:
        if failing:
            raise failing.pop()
        reported.append(number)

    at.delivery._on_taken = on_taken
    at.delivery.start()
    at.offer("ordered", 1)
    await at.settled()
    assert reported == []
    await at.time.advance(1)
    assert reported == [1]
    assert at.delivery.state().failing_since_ns is None
    assert len(at.takes) == 1
    await at.delivery.close()


async def test_closing_in_the_middle_of_a_call_and_of_a_rest() -> None:
    for step in (asyncio.Event(), SinkRetry("down", 100)):
        at = Desk(ScriptedSink())
        at.delivery.start()
        at.delivery.start()  # a second time does nothing
        await at.settled()
        at.sink.script.append(step)
        at.offer("ordered", 1)
        await at.settled()
        await at.delivery.close()
        at.delivery.check()
        assert not at.delivery.state().running
        assert batches_left(await at.delivery.drain(5.0)) == {"ordered": 1}


async def test_every_try_is_logged_with_the_time_until_the_next(caplog: pytest.LogCaptureFixture) -> None:
    sink = ScriptedSink()
    with caplog.at_level(logging.INFO):
        async with desk(sink) as at:
            sink.script.append(SinkRetry("river.db is locked by another program", 4))
            at.offer("ordered", 1)
            await at.time.advance(5)
    messages = [record.getMessage() for record in caplog.records]
    assert messages[0] == (
        "sink river-store: river.db is locked by another program; batches wait, next try in 4.0 s"
    )
    assert messages[1] == "sink river-store works again after 4.0 s"
