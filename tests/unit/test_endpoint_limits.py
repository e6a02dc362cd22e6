"""Requests at the limits, over real HTTP: each refused with its reason and a time to retry, and taken again later.

What is refused leaves nothing behind; what waits its turn is answered.
"""

from __future__ import annotations

import asyncio
import errno
from pathlib import Path

import aiohttp
from helpers_faulty import FaultyDisk, planted, scripted
from helpers_service import NDJSON, body_of, configuration, events, eventually, problem_of, retry_after, running
from strandline.errors import REFUSALS
from strandline.sinks.lanes import forget_rows  # what `strandline quarantine forget` calls


async def test_held_full(tmp_path: Path) -> None:
    text = configuration(tmp_path, slack="1h", events_at_most=10, held_events_at_most=10)
    async with running(text) as service:
        await service.send(range(8))
        answer = await service.post("events", events(range(3)))
        assert "held_events_at_most" in problem_of(answer, 429, "held_full") and retry_after(answer) > 0
        await service.send(range(2))
        assert (await service.post("drain")).status == 204
        assert (await service.send(range(10, 15)))["accepted"] == 5


async def test_journal_full_and_then_not(tmp_path: Path) -> None:
    """The sink stands, so nothing can be deleted; once it goes on, room is made without anybody's help."""
    toml, sinks = scripted("a")
    going_on = asyncio.Event()
    sinks["a"].script.extend(["ok", going_on])
    limits = dict.fromkeys(("decoded_bytes_at_most", "body_bytes_at_most", "event_bytes_at_most"), "64KiB")
    more = 'journal = { segment_bytes = "64KiB", at_most = "192KiB" }'
    async with running(configuration(tmp_path, sinks=toml, more=more, **limits), make=planted(**sinks)) as service:
        sent, answer = 0, None
        for _ in range(100):
            answer = await service.post("events", events(range(sent, sent + 100)))
            if answer.status != 200:
                break
            sent += 100
        assert answer is not None
        assert "journal.at_most" in problem_of(answer, 429, "journal_full") and retry_after(answer) > 0
        assert (await service.document())["refusals"]["journal_full"] == 1
        going_on.set()
        await eventually(lambda: service.runtime.journal.bytes_used < 192 * 1024, "segments are deleted")
        assert (await service.send(range(sent, sent + 100)))["accepted"] == 100


async def test_sources_full(tmp_path: Path) -> None:
    async with running(configuration(tmp_path, sources_at_most=2)) as service:
        await service.send([1], "gw-1")
        await service.send([1], "gw-2")
        answer = await service.post("events", events([1], "gw-3"))
        assert "sources_at_most" in problem_of(answer, 429, "sources_full") and retry_after(answer) > 0
        promise = {"source": "gw-3", "time": "2023-01-01T00:00:00Z"}
        problem_of(await service.post("marks", promise), 429, "sources_full")
        assert (await service.send([2], "gw-2"))["accepted"] == 1


async def test_lanes_full_and_then_forgotten(tmp_path: Path) -> None:
    async with running(configuration(tmp_path, lanes_at_most="1MiB")) as service:
        bad = body_of(*(b"x" * 1000 for _ in range(500)))
        answer = None
        for _ in range(20):
            answer = await service.post("events", bad)
            await eventually(lambda: service.runtime.feed.state.outbox.aside_events == 0)
            if answer.status != 200:
                break
        assert answer is not None
        assert "quarantine forget" in problem_of(answer, 429, "lanes_full") and retry_after(answer) > 0
        problem_of(await service.post("events", events([1])), 429, "lanes_full")
        await asyncio.to_thread(forget_rows, service.runtime.lanes_file, "quarantine", 10**6)
        await eventually(lambda: service.runtime.lane_store.size.file_bytes < 2**20, "the service looks again")
        assert (await service.send([1]))["accepted"] == 1


async def test_too_much_aside_that_its_sink_does_not_take(tmp_path: Path) -> None:
    toml, sinks = scripted("a")
    sinks["a"].script.extend(["ok", asyncio.Event()])
    text = configuration(tmp_path, sinks=toml, undelivered_events_at_most=10, batch_events_at_most=10)
    async with running(text.replace('"20s"', '"0s"'), make=planted(**sinks)) as service:
        await service.send([10])
        await eventually(lambda: sinks["a"].busy)
        assert (await service.send(range(9)))["late"] == 9
        answer = await service.post("events", events(range(5)))
        assert "undelivered_events_at_most" in problem_of(answer, 429, "lanes_full") and retry_after(answer) > 0


async def test_a_disk_without_room(tmp_path: Path) -> None:
    disk = FaultyDisk(tmp_path / "data")
    limits = dict.fromkeys(("decoded_bytes_at_most", "body_bytes_at_most", "event_bytes_at_most"), "64KiB")
    more = 'journal = { segment_bytes = "64KiB", at_most = "1MiB" }'
    async with running(configuration(tmp_path, more=more, **limits), disk=disk) as service:
        await service.send([0])
        disk.fail("create", errno.ENOSPC)
        sent, answer = 1, None
        for _ in range(100):
            answer = await service.post("events", events(range(sent, sent + 100)))
            if answer.status != 200:
                break
            sent += 100
        assert answer is not None
        assert "No space left" in problem_of(answer, 503, "disk_full") and retry_after(answer) > 0
        assert service.service.failure is None
        disk.heal()
        assert (await service.send(range(sent, sent + 100)))["accepted"] == 100


async def test_while_it_stops(tmp_path: Path) -> None:
    toml, sinks = scripted("a")
    going_on = asyncio.Event()
    sinks["a"].script.extend(["ok", going_on])
    async with running(configuration(tmp_path, sinks=toml), make=planted(**sinks)) as service:
        await service.send([1])
        stopping = asyncio.create_task(service.service.stop())
        await eventually(lambda: not service.runtime.accepting)
        promise = {"source": "gw-1", "time": "2023-01-01T00:00:00Z"}
        for path, body in (("events", events([2])), ("drain", b""), ("marks", promise)):
            answer = await service.post(path, body)
            problem_of(answer, 503, "stopping")
            assert retry_after(answer) > 0
        going_on.set()
        await stopping


# ---- a place in the queue -------------------------------------------------------------------------------------------


async def test_more_bodies_than_may_be_in_memory_wait_their_turn(tmp_path: Path) -> None:
    disk = FaultyDisk(tmp_path / "data")
    text = configuration(tmp_path, top="[limits]\nbodies_at_most = 2")
    async with running(text, disk=disk) as service:
        await service.send([0])
        disk.syncing.clear()
        sending = [asyncio.create_task(service.post("events", events([second]))) for second in range(1, 7)]
        await eventually(lambda: service.runtime.hops()["journal"].waiting == 2)
        assert service.runtime.feed.state.ledger.received == 3
        disk.syncing.set()
        answers = await asyncio.gather(*sending)
        assert [answer.status for answer in answers] == [200] * 6
        assert service.runtime.feed.state.ledger.received == 7


async def test_one_connection_serves_many_requests(tmp_path: Path) -> None:
    async with (
        running(configuration(tmp_path)) as service,
        aiohttp.ClientSession(connector=aiohttp.TCPConnector(limit=1)) as session,
    ):
        for second in range(5):
            url = f"{service.feed_url}/events"
            async with session.post(url, data=events([second]), headers={"Content-Type": NDJSON}) as answer:
                assert answer.status == 200


async def test_bodies_that_are_refused_unread_are_counted_by_reason(tmp_path: Path) -> None:
    """RFC 9110: 400, 413, 415, 422; a sender that is refused must be seen by who looks at the metrics."""
    cases = {
        "header_unreadable": {"Idempotency-Key": "no quotes"},
        "body_too_large": {},
        "body_unsupported": {"Content-Type": "text/html"},
        "body_unreadable": {"Content-Encoding": "gzip"},
    }
    async with running(configuration(tmp_path, body_bytes_at_most="64KiB", events_at_most=10)) as service:
        for reason, headers in cases.items():
            body = events(range(11 if reason == "body_too_large" else 1))
            answer = await service.post("events", body, headers=headers)
            assert (answer.status, service.runtime.feed.refusals) == (REFUSALS[reason][0], {reason: 1})
            service.runtime.feed.refusals.clear()
        assert (await service.send([1]))["accepted"] == 1
