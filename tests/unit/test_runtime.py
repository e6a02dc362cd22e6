"""A feed's shell at its limits: failed and hanging syncs, sinks that are dead or late, a stop in its written order.

In this process, on a real folder, with disks and sinks that fail when they are told to.
"""

from __future__ import annotations

import asyncio
import errno
import logging
import os
import signal
import sqlite3
from pathlib import Path

import pytest
from helpers_delivery import ScriptedSink
from helpers_faulty import FaultyDisk, planted, scripted
from helpers_service import (
    PROBLEM,
    Process,
    config_of,
    configuration,
    events,
    eventually,
    running,
    small_journal,
    store_in,
    stored,
)
from strandline import sinks_of as sinks_module
from strandline.app import EXIT_AT_ONCE, EXIT_FAILED, Service, serve
from strandline.errors import SinkRetry

# ---- a write that fails is final ------------------------------------------------------------------------------------


async def test_a_failed_sync_stops_the_service_and_says_so(
    tmp_path: Path, caplog: pytest.LogCaptureFixture, capsys: pytest.CaptureFixture[str]
) -> None:
    disk = FaultyDisk(tmp_path / "data")
    async with running(configuration(tmp_path), disk=disk) as service:
        await service.send([1, 2])
        disk.fail("sync")
        answer = await service.post("events", events([3]))
        assert (answer.status, answer.headers["Content-Type"]) == (503, PROBLEM)
        assert answer.json["type"] == "urn:strandline:problem:failed"
        assert answer.headers["Retry-After"].isdigit()
        assert service.service.stopping.is_set()
        refused = await service.post("events", events([4]))
        assert refused.status == 503 and "Input/output error" in refused.json["detail"]
        ready = await service.get("/health/ready")
        assert ready.status == 503 and "has stopped" in ready.json["detail"]
        assert (await service.document())["state"] == "failed"
    assert any(record.levelno == logging.CRITICAL and "failed" in record.message for record in caplog.records)
    async with running(configuration(tmp_path)) as service:  # what was answered is there, and it goes on
        assert (await service.document())["ledger"]["received"] in (2, 3)
        await service.send([5])


async def test_a_failure_is_the_exit_code(tmp_path: Path, caplog: pytest.LogCaptureFixture) -> None:
    disk = FaultyDisk(tmp_path / "data")
    service = Service(config_of(configuration(tmp_path)), disk=disk)
    serving = asyncio.create_task(serve(service))
    await eventually(lambda: bool(service.feeds) and all(feed.accepting for feed in service.feeds.values()))
    disk.fail("sync")
    service.stopping.set()  # the stop itself meets the fault: nothing is queued, so the last sync does
    assert await serving == EXIT_FAILED
    assert "Input/output error" in caplog.text


@pytest.mark.parametrize("operation", ["sync", "write", "create"])
async def test_a_disk_that_fails_during_the_stop_does_not_keep_it_from_ending(tmp_path: Path, operation: str) -> None:
    disk = FaultyDisk(tmp_path / "data")
    async with running(configuration(tmp_path), disk=disk) as service:
        await service.send([1, 2])
        sending = asyncio.create_task(service.post("events", events([3])))
        await eventually(lambda: service.runtime.feed.state.ledger.received == 3)
        disk.fail(operation)
        await service.service.stop()
        assert service.service.failure is not None
        assert (await sending).status in (200, 503)
    async with running(configuration(tmp_path)) as service:
        assert (await service.document())["ledger"]["received"] >= 2


async def test_an_unforeseen_error_in_the_core_is_final(tmp_path: Path, caplog: pytest.LogCaptureFixture) -> None:
    """Books that do not balance, say: state and journal may differ by then, so nothing more may be decided on them."""
    async with running(configuration(tmp_path)) as service:
        await service.send([1])
        service.runtime.feed.state.ledger.received += 1
        answer = await service.post("events", events([2]))
        assert answer.status == 503 and answer.json["type"].endswith(":failed")
        assert service.service.stopping.is_set()
        assert "the books do not balance" in (service.service.failure or "")
    async with running(configuration(tmp_path)) as service:
        assert (await service.document())["ledger"]["received"] in (1, 2)


async def test_an_unforeseen_error_in_a_tick_is_final_too(tmp_path: Path) -> None:
    async with running(configuration(tmp_path)) as service:
        await service.send([1])
        service.runtime.feed.state.ledger.received += 1
        await asyncio.wait_for(service.service.stopping.wait(), 30)
        assert "the books do not balance" in (service.service.failure or "")


async def test_a_configuration_that_could_not_be_written_down_is_not_taken_over(
    tmp_path: Path, caplog: pytest.LogCaptureFixture
) -> None:
    """Settings are records; without room for them the journal would tell another story than the service lived."""
    disk, file = FaultyDisk(tmp_path / "data"), tmp_path / "strandline.toml"
    async with running(small_journal(tmp_path, "1MiB"), disk=disk) as service:
        runtime = service.runtime
        await service.send([1])
        file.write_text(small_journal(tmp_path, "1MiB", slack="7s"))
        disk.fail("create", errno.ENOSPC)
        while runtime.has_headroom():
            runtime.carry_out(runtime.feed.promise("gw-1", 0, runtime.clock.now_ns(), 0))
        assert service.service.reload(file, {}) is False and "no room" in caplog.text
        assert runtime.config.slack_ns == runtime.feed.state.settings.slack_ns == 0
        disk.heal()
        assert service.service.reload(file, {}) is True
        assert runtime.config.slack_ns == runtime.feed.state.settings.slack_ns == 7 * 10**9


# ---- sinks ----------------------------------------------------------------------------------------------------------


async def test_a_sink_that_is_dead_at_the_start_of_a_known_feed_does_not_keep_it_from_starting(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    toml, sinks = scripted("a")
    text = configuration(tmp_path, sinks=toml)
    async with running(text, make=planted(**sinks)) as service:
        await service.send([1])
    monkeypatch.setattr(sinks_module, "OPEN_WITHIN_S", 0.01)
    alive = asyncio.Event()
    dead = ScriptedSink()
    dead.durable["ordered"] = [1]
    dead.script.append(alive)
    async with running(text, make=planted(a=dead)) as service:
        await service.send([2, 3])
        document = await service.document()
        assert document["sinks"]["a"]["connected"] is False
        assert document["sinks"]["a"]["lanes"]["ordered"]["waiting_events"] == 2
        alive.set()
        await eventually(lambda: dead.durable["ordered"] == [1, 2])


async def test_a_new_feed_waits_for_its_sinks_and_a_signal_ends_the_waiting(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, caplog: pytest.LogCaptureFixture
) -> None:
    """Only the store knows whether numbers were used before, so a feed without a journal must not begin without it."""
    monkeypatch.setattr(sinks_module, "OPEN_WITHIN_S", 0.01)
    toml, sinks = scripted("a")
    sinks["a"].script.extend([SinkRetry("no store there")] * 1000)
    service = Service(config_of(configuration(tmp_path, sinks=toml)), make=planted(**sinks))
    serving = asyncio.create_task(serve(service))
    await eventually(lambda: "no answer yet from sink a" in caplog.text)
    assert not serving.done()
    os.kill(os.getpid(), signal.SIGTERM)
    assert await asyncio.wait_for(serving, 30) == 0
    assert "no store there" in caplog.text


async def test_a_store_that_is_ahead_of_a_new_journal_is_numbered_on_from(tmp_path: Path) -> None:
    toml, sinks = scripted("a")
    sinks["a"].start = {"ordered": 41, "late": 7}
    async with running(configuration(tmp_path, sinks=toml), make=planted(**sinks)) as service:
        await service.send([1])
        await eventually(lambda: sinks["a"].durable["ordered"] == [42])


async def test_a_sink_that_answers_while_the_service_closes_does_no_harm(tmp_path: Path) -> None:
    """The journal must take no record any more once it is closed; a sink's last word comes again at the next start."""
    toml, sinks = scripted("a", "b")
    answer = asyncio.Event()
    sinks["b"].script.extend(["ok", answer])

    async def slow_close() -> None:
        answer.set()
        for _ in range(100):
            await asyncio.sleep(0)

    sinks["a"].close = slow_close  # type: ignore[method-assign]
    text = configuration(tmp_path, sinks=toml).replace('"20s"', '"0s"')
    async with running(text, make=planted(**sinks)) as service:
        await service.send([1])
        await eventually(lambda: sinks["b"].busy)
        await service.service.stop()
        assert service.service.failure is None
    async with running(text, make=planted(**scripted("a", "b")[1])) as service:
        assert (await service.document())["ledger"]["released"] == 1


async def test_a_position_that_found_no_room_in_the_journal_is_told_again(tmp_path: Path) -> None:
    """The disk is full to the last reserved byte when a sink reports; later there is room again."""
    disk = FaultyDisk(tmp_path / "data")
    toml, sinks = scripted("a")
    taking = asyncio.Event()
    sinks["a"].script.extend(["ok", taking])
    async with running(small_journal(tmp_path, "1MiB", sinks=toml), disk=disk, make=planted(**sinks)) as service:
        await service.send([1])
        await eventually(lambda: sinks["a"].busy)
        disk.fail("create", errno.ENOSPC)
        runtime = service.runtime
        while runtime.has_headroom():
            runtime.carry_out(runtime.feed.promise("gw-1", 0, runtime.clock.now_ns(), 0))
        answer = await service.post("marks", {"source": "gw-1", "time": "2023-01-01T00:00:00Z"})
        assert answer.status == 503 and answer.json["type"].endswith(":disk_full")
        assert answer.headers["Retry-After"].isdigit()
        taking.set()
        await eventually(lambda: runtime.deliveries["a"].state().lanes["ordered"].batches == 0)
        assert runtime.feed.state.outbox.undelivered_events == 1
        disk.heal()
        await eventually(lambda: service.runtime.feed.state.outbox.undelivered_events == 0)


# ---- the stop -------------------------------------------------------------------------------------------------------


async def test_a_stop_delivers_what_was_released_and_keeps_what_is_held(tmp_path: Path) -> None:
    text = configuration(tmp_path, slack="5s")
    async with running(text) as service:
        await service.send(range(20))
        await service.service.stop()
        assert stored(tmp_path) == list(range(15))
    async with running(text) as service:
        document = await service.document()
        assert document["ledger"]["buffered"] == 5 and document["held"]["events"] == 5
        assert (await service.post("drain")).status == 204
        await eventually(lambda: stored(tmp_path) == list(range(20)))


async def test_a_stop_answers_those_who_wait_on_a_sync(tmp_path: Path) -> None:
    disk = FaultyDisk(tmp_path / "data")
    async with running(configuration(tmp_path), disk=disk) as service:
        await service.send([1])
        disk.syncing.clear()
        sending = asyncio.create_task(service.post("events", events([2])))
        await eventually(disk.waits_in_sync.is_set)
        stopping = asyncio.create_task(service.service.stop())
        await eventually(lambda: not service.runtime.accepting)
        refused = await service.post("events", events([3]))
        assert refused.status == 503 and refused.json["type"].endswith(":stopping")
        disk.syncing.set()
        assert (await sending).status == 200
        await stopping
    assert stored(tmp_path) == [1, 2]


async def test_two_services_cannot_use_one_folder(tmp_path: Path) -> None:
    async with running(configuration(tmp_path)):
        with pytest.raises(Exception, match="another process uses this directory"):
            await Service(config_of(configuration(tmp_path))).start()


def test_a_second_signal_stops_at_once(tmp_path: Path) -> None:
    """The store is locked by somebody else, so the first signal waits for it; the second does not."""
    with Process(tmp_path, configuration(tmp_path)) as process:
        path = "/v1/feeds/river-gauges/events"
        assert process.ask(path, events([1])).status == 200
        process.until(process.delivered, "the first event is delivered")
        locker = sqlite3.connect(store_in(tmp_path), isolation_level=None)
        locker.execute("BEGIN IMMEDIATE")
        assert process.ask(path, events([2])).json["accepted"] == 1
        assert process.process is not None
        process.process.send_signal(signal.SIGTERM)
        process.until(lambda: process.status("/health/ready") == 503, "it is not stopping")
        process.process.send_signal(signal.SIGTERM)
        assert process.wait() == EXIT_AT_ONCE
        locker.execute("ROLLBACK")
        locker.close()
        process.start()
        process.until(lambda: stored(tmp_path) == [1, 2], "what was answered is delivered after the next start")


def test_a_port_that_is_taken_ends_the_start_with_a_sentence(tmp_path: Path) -> None:
    with Process(tmp_path, configuration(tmp_path)) as process:
        other = tmp_path / "other"
        other.mkdir()
        text = configuration(other).replace("127.0.0.1:0", process.url.removeprefix("http://"))
        second = Process(other, text)
        second.begin()
        assert second.wait() == 3
        assert "address already in use" in second.log.read_text()
