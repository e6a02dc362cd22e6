"""Health: alive, ready, and not ready with the cause when work waits and nothing advances.

The arrival clock is the test's own: half a minute passes when the test says so.
"""

from __future__ import annotations

import asyncio
from pathlib import Path

import pytest
from helpers_faulty import FaultyDisk, planted, scripted
from helpers_service import configuration, events, eventually, problem_of, retry_after, running
from helpers_sinks import VirtualTime
from strandline.documents import STALLED_AFTER_S
from strandline.errors import SinkRetry

LONG_NS = int((STALLED_AFTER_S + 1) * 1e9)


async def test_a_service_that_works_is_alive_and_ready(tmp_path: Path) -> None:
    async with running(configuration(tmp_path)) as service:
        assert (await service.get("/health/live")).json == {"live": True}
        assert (await service.get("/health/ready")).json == {"ready": True}


async def test_a_sink_that_never_answers(tmp_path: Path) -> None:
    clock = VirtualTime()
    toml, sinks = scripted("a")
    answering = asyncio.Event()
    sinks["a"].script.extend(["ok", answering])
    async with running(configuration(tmp_path, sinks=toml), clock=clock, make=planted(**sinks)) as service:
        await service.send([1])
        await eventually(lambda: sinks["a"].busy)
        assert (await service.get("/health/ready")).status == 200
        clock.now += LONG_NS
        answer = await service.get("/health/ready")
        detail = problem_of(answer, 503)
        assert "sink a has taken nothing of lane ordered for 31 s: it does not answer" in detail
        assert retry_after(answer) > 0
        assert (await service.get("/health/live")).status == 200, "a restart would not help"
        assert (await service.document())["state"] == "stalled"
        answering.set()
        await eventually(lambda: sinks["a"].durable["ordered"] == [1])
        assert (await service.get("/health/ready")).status == 200
        assert (await service.document())["state"] == "running"


async def test_a_sink_that_fails_and_works_again(tmp_path: Path) -> None:
    clock = VirtualTime()
    toml, sinks = scripted("a")
    sinks["a"].script.extend(["ok", *[SinkRetry("the store is full", retry_after_s=3600)]])
    async with running(configuration(tmp_path, sinks=toml), clock=clock, make=planted(**sinks)) as service:
        await service.send([1])
        await eventually(lambda: service.runtime.deliveries["a"].state().failing_since_ns is not None)
        sink = (await service.document())["sinks"]["a"]
        assert sink["last_error"] == "the store is full" and sink["failing_since"] and sink["retries"] == 1
        clock.now += LONG_NS
        assert "the store is full" in problem_of(await service.get("/health/ready"), 503)
        service.runtime.deliveries["a"].resume()
        await eventually(lambda: sinks["a"].durable["ordered"] == [1])
        assert (await service.get("/health/ready")).status == 200


async def test_a_disk_that_does_not_answer(tmp_path: Path) -> None:
    clock, disk = VirtualTime(), FaultyDisk(tmp_path / "data")
    async with running(configuration(tmp_path), clock=clock, disk=disk) as service:
        await service.send([1])
        disk.syncing.clear()
        sending = asyncio.create_task(service.post("events", events([2])))
        await eventually(disk.waits_in_sync.is_set)
        clock.now += LONG_NS
        ready = await service.get("/health/ready")
        disk.syncing.set()
        assert "waited for a sync of the journal for 31 s" in problem_of(ready, 503)
        assert (await sending).status == 200
        await eventually(lambda: service.runtime.feed.state.outbox.undelivered_events == 0)
        assert (await service.get("/health/ready")).status == 200


async def test_events_that_are_held_beyond_the_limit(tmp_path: Path) -> None:
    """No mark is set while too much is undelivered: then `hold_at_most` cannot be kept, and it says so."""
    clock = VirtualTime()
    toml, sinks = scripted("a")
    answering = asyncio.Event()
    sinks["a"].script.extend(["ok", answering])
    keys = {"undelivered_events_at_most": 1, "batch_events_at_most": 1, "hold_at_most": "10s"}
    async with running(configuration(tmp_path, sinks=toml, **keys), clock=clock, make=planted(**sinks)) as service:
        await service.send([1, 2])
        await service.send([3])
        assert (await service.document())["hold"]["why"] == "sink_full"
        clock.now += LONG_NS + 10 * 10**9
        detail = problem_of(await service.get("/health/ready"), 503)
        assert "an event has been held for 41 s, hold_at_most is 10 s" in detail and "sink a" in detail
        answering.set()
        await eventually(lambda: service.runtime.feed.state.runs.held == 0)
        assert (await service.get("/health/ready")).status == 200


@pytest.mark.parametrize("slack", ["0s", "5s"])
async def test_a_feed_that_is_silent_is_no_stall(tmp_path: Path, slack: str) -> None:
    clock = VirtualTime()
    async with running(configuration(tmp_path, slack=slack, hold_at_most="10s"), clock=clock) as service:
        await service.send([1])
        clock.now += 3600 * 10**9
        await eventually(lambda: service.runtime.feed.state.runs.held == 0)
        clock.now += 3600 * 10**9
        await eventually(lambda: service.runtime.feed.state.outbox.undelivered_events == 0)
        assert (await service.get("/health/ready")).status == 200
