"""Delivery to a sink that is down, hangs, refuses, or takes and then fails; time and chance belong to the test."""

from __future__ import annotations

import asyncio
import logging
import random
from collections.abc import Sequence
from typing import Any

import pytest
from helpers_delivery import SEED, Desk, ScriptedSink, batches_left, desk, with_time
from helpers_sinks import START_NS, settle
from strandline.core.columns import Batch, Lane
from strandline.errors import SinkRefused, SinkRetry

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


@pytest.mark.parametrize(
    ("named", "waited"), [(7.0, 7.0), (1e9, 3600.0), (0.0, None), (-5.0, None), (float("nan"), None)]
)
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


async def test_every_try_is_logged_with_the_time_until_the_next(caplog: pytest.LogCaptureFixture) -> None:
    sink = ScriptedSink()
    with caplog.at_level(logging.INFO):
        async with desk(sink) as at:
            sink.script.append(SinkRetry("river.db is locked by another program", 4))
            at.offer("ordered", 1)
            await at.time.advance(5)
    messages = [record.getMessage() for record in caplog.records]
    assert messages[0] == "sink river-store: river.db is locked by another program; batches wait, next try in 4.0 s"
    assert messages[1] == "sink river-store works again after 4.0 s"
