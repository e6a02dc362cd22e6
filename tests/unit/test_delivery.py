"""Delivery when all goes well: groups, positions, flushing, pausing, draining, what an observer sees."""

from __future__ import annotations

import asyncio
from typing import Any

import pytest
from helpers_delivery import Desk, ScriptedSink, batches_left, desk, with_time
from helpers_sinks import START_NS
from strandline.core.columns import Lane
from strandline.errors import SinkRetry

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
