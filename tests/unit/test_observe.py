"""What can be seen over HTTP: documents, pages, the ordered output as a stream, health with its causes.

Time is the test's own where something must have waited: no test waits for it.
"""

from __future__ import annotations

import asyncio
import json
from collections.abc import AsyncIterator
from contextlib import asynccontextmanager
from pathlib import Path
from typing import Any

import aiohttp
import pytest
from helpers_faulty import FaultyDisk
from helpers_service import (
    BEGIN_S,
    Running,
    body_of,
    configuration,
    event_line,
    eventually,
    problem_of,
    retry_after,
    running,
)
from strandline import app as app_module
from strandline import observe
from strandline import recent as recent_module
from strandline.ingest.timestamps import parse_rfc3339

SECOND_NS = 10**9


# ---- documents and pages --------------------------------------------------------------------------------------------


async def test_the_document_of_a_feed(tmp_path: Path) -> None:
    async with running(configuration(tmp_path, slack="5s")) as service:
        empty = await service.document()
        assert (empty["watermark"], empty["watermark_ns"], empty["newest"]) == (None, None, None)
        assert empty["hold"]["why"] == "nothing_held" and empty["state"] == "running"
        await service.send([10, 20])
        await service.send([12], "gw-2")
        found = await service.document()
        assert parse_rfc3339(found["newest"]) == (BEGIN_S + 20) * SECOND_NS
        assert parse_rfc3339(found["watermark"]) == found["watermark_ns"] == (BEGIN_S + 15) * SECOND_NS
        assert found["slack_s"] == 5.0
        assert (found["hold"]["why"], found["hold"]["source"]) == ("slow_source", "gw-2")
        assert found["held"]["events"] == found["ledger"]["buffered"] == 1
        assert found["ledger"] == {
            "received": 3, "released": 1, "late": 1, "duplicate": 0, "quarantined": 0, "buffered": 1, "balanced": True,
        }  # fmt: skip
        assert found["sources"] == {"known": 2, "active": 2}
        assert found["sinks"]["sqlite"]["connected"] is True and found["sinks"]["sqlite"]["last_error"] is None
        assert (await service.get("/v1/feeds")).json["feeds"][0]["name"] == found["name"]


async def test_sources_page_by_page(tmp_path: Path) -> None:
    async with running(configuration(tmp_path)) as service:
        for number in range(7):
            await service.send([number], f"gw-{number}")
        seen, after = [], 0
        while after is not None:
            page = (await service.get(f"sources?after={after}&limit=3")).json
            seen += [source["source"] for source in page["sources"]]
            assert len(page["sources"]) <= 3 and page["known"] == 7
            after = page["next_after"]
        assert seen == [f"gw-{number}" for number in range(7)]


async def test_late_events_and_quarantine_page_by_page(tmp_path: Path) -> None:
    async with running(configuration(tmp_path)) as service:
        await service.send([100])
        await service.send([5, 4, 3], "gw-2")
        await service.post("events", body_of(b"\xff\xfe", b"{", event_line(50)))
        await eventually(lambda: service.runtime.feed.state.outbox.aside_events == 0)
        first = (await service.get("late?limit=2")).json
        rest = (await service.get(f"late?after={first['next_after']}")).json
        late = [*first["late"], *rest["late"]]
        assert [row["event"].encode() for row in late[:3]] == [event_line(second, "gw-2") for second in (5, 4, 3)]
        assert [row["late_by_ns"] for row in late] == [n * SECOND_NS for n in (95, 96, 97, 50)]
        assert all(row["late_by_s"] == row["late_by_ns"] / 1e9 for row in late)
        assert [row["time"] for row in late[:2]] == ["2023-11-14T22:13:25Z", "2023-11-14T22:13:24Z"]
        assert all(parse_rfc3339(row["arrived"]) == row["arrived_ns"] for row in late)
        only = (await service.get("late?source=gw-1")).json["late"]
        assert [row["event"].encode() for row in only] == [event_line(50)]
        found = (await service.get("quarantine")).json["quarantine"]
        assert [(row["line"], row["reason"], row["event"]) for row in found] == [
            (1, "malformed", "\ufffd\ufffd"),
            (2, "malformed", "{"),
        ]
        assert all(parse_rfc3339(row["arrived"]) == row["arrived_ns"] for row in found)
        assert (await service.get("quarantine?after=2")).json == {"quarantine": [], "next_after": None}


async def test_lines_of_one_request_are_quarantined_in_their_order(tmp_path: Path) -> None:
    async with running(configuration(tmp_path)) as service:
        ahead = event_line(2_000_000_000)
        answer = await service.post("events", body_of(ahead, b"{", ahead, event_line(1), b"x"))
        assert answer.json["quarantined"] == 4
        await eventually(lambda: service.runtime.feed.state.outbox.aside_events == 0)
        found = (await service.get("quarantine")).json["quarantine"]
        reasons = [(1, 1, "ahead"), (2, 2, "malformed"), (3, 3, "ahead"), (4, 5, "malformed")]
        assert [(row["number"], row["line"], row["reason"]) for row in found] == reasons
        assert [row["event"].encode() for row in found] == [ahead, b"{", ahead, b"x"]


async def test_numbers_that_are_none(tmp_path: Path) -> None:
    async with running(configuration(tmp_path)) as service:
        for path in ("late?after=-1", "late?limit=x", "sources?after=1.5", "ordered?after=", "ordered?after=²"):
            assert "whole number" in problem_of(await service.get(path), 400)


async def test_a_lane_that_cannot_be_read_now(tmp_path: Path) -> None:
    async with running(configuration(tmp_path)) as service:
        service.runtime.lanes_file = tmp_path / "lanes.db"
        service.runtime.lanes_file.write_bytes(b"this is no database" * 100)
        answer = await service.get("late")
        assert "lanes.db" in problem_of(answer, 503) and retry_after(answer) > 0


async def test_head_is_answered_where_get_is_except_for_the_endless_stream(tmp_path: Path) -> None:
    async with running(configuration(tmp_path)) as service:
        answer = await service.ask("HEAD", "/health/ready")
        assert (answer.status, answer.content) == (200, b"")
        assert (await service.ask("HEAD", "ordered")).status == 405


# ---- the ordered output ---------------------------------------------------------------------------------------------


class Listener:
    """One who reads the ordered output line by line."""

    def __init__(self, answer: aiohttp.ClientResponse) -> None:
        self.answer = answer

    async def rows(self, count: int) -> list[dict[str, Any]]:
        """The next rows; empty lines are passed over."""
        found: list[dict[str, Any]] = []
        while len(found) < count:
            line = await self.answer.content.readline()
            assert line, "the stream has ended"
            if line.strip():
                found.append(json.loads(line))
        return found

    async def rest(self) -> list[dict[str, Any]]:
        """All rows to the end of the stream."""
        return [json.loads(line) for line in (await self.answer.content.read()).splitlines() if line]


def listening(service: Running, after: int | None = None) -> Any:
    query = "" if after is None else f"?after={after}"
    return service.session.get(f"{service.feed_url}/ordered{query}")


def seconds(rows: list[dict[str, Any]]) -> list[int]:
    return [row["time_ns"] // SECOND_NS - BEGIN_S for row in rows]


async def test_one_who_listens_gets_batches_as_they_are_released(tmp_path: Path) -> None:
    async with running(configuration(tmp_path)) as service:
        await service.send([1])
        async with listening(service) as answer:
            assert answer.status == 200 and answer.content_type == "application/x-ndjson"
            listener = Listener(answer)
            line = b'{"observed_at":"2023-11-14T22:13:22Z",  "station":"gw-\\u0031","z":[1,2.50]}'
            await service.post("events", body_of(event_line(3), line))
            assert await answer.content.readline() == (
                b'{"batch":2,"position":0,"time_ns":1700000002000000000,"source":"gw-1","event":%b}\n' % line
            ), "the event's own bytes"
            await service.send([4])
            assert [(row["batch"], row["position"]) for row in await listener.rows(2)] == [(2, 1), (3, 0)]


async def test_one_who_comes_again_goes_on_where_it_was(tmp_path: Path) -> None:
    text = configuration(tmp_path, batch_events_at_most=2)
    async with running(text) as service:
        async with listening(service, 0) as answer:
            await service.send(range(5))
            rows = await Listener(answer).rows(2)
        await service.send(range(5, 9))
        for size in (2, 1, 2, 2):
            async with listening(service, rows[-1]["batch"]) as answer:
                rows += await Listener(answer).rows(size)
        assert seconds(rows) == list(range(9))
        assert [row["batch"] for row in rows] == [1, 1, 2, 2, 3, 4, 4, 5, 5]


async def test_what_has_gone_is_said_and_what_never_was_too(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(recent_module, "EVENTS_AT_MOST", 3)
    async with running(configuration(tmp_path)) as service:
        for second in range(6):
            await service.send([second])
        await eventually(lambda: service.runtime.recent.reached == 6)
        assert "batches from 4 on" in problem_of(await service.get("ordered?after=2"), 410)
        async with listening(service, 3) as answer:
            assert seconds(await Listener(answer).rows(3)) == [3, 4, 5]
        assert "the last one is 6" in problem_of(await service.get("ordered?after=7"), 400)


async def test_the_numbers_go_on_after_a_restart(tmp_path: Path) -> None:
    async with running(configuration(tmp_path)) as service:
        await service.send([1])
        await service.send([2])
    async with running(configuration(tmp_path)) as service:
        assert "older ones are in the feed's sinks" in problem_of(await service.get("ordered?after=1"), 410)
        async with listening(service, 2) as answer:
            await service.send([3])
            assert [(row["batch"], row["position"]) for row in await Listener(answer).rows(1)] == [(3, 0)]


async def test_what_waits_for_its_sync_is_still_to_come(tmp_path: Path) -> None:
    disk = FaultyDisk(tmp_path / "data")
    async with running(configuration(tmp_path), disk=disk) as service:
        await service.send([1])
        disk.syncing.clear()
        sending = asyncio.create_task(service.send([2]))
        await eventually(lambda: service.runtime.feed.state.ledger.released == 2)
        async with listening(service) as answer:
            disk.syncing.set()
            assert seconds(await Listener(answer).rows(1)) == [2]
        await sending


async def test_an_empty_line_keeps_the_connection_alive(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(observe, "KEEPALIVE_S", 0.01)
    async with running(configuration(tmp_path)) as service, listening(service) as answer:
        assert await answer.content.readline() == b"\n"


async def filled(service: Running, batches: int, size: int = 60_000) -> None:
    """Release batches of one large event each."""
    for second in range(batches):
        answer = await service.post("events", body_of(event_line(second, pad="x" * size)))
        assert answer.status == 200


@asynccontextmanager
async def stuck(service: Running) -> AsyncIterator[None]:
    """One who asks for the ordered output and reads nothing; what it has room for is little."""
    address = service.service.address
    _, writer = await asyncio.open_connection(address.host, address.port, limit=1024)
    writer.write(b"GET /v1/feeds/river-gauges/ordered?after=0 HTTP/1.1\r\nHost: localhost\r\n\r\n")
    await writer.drain()
    try:
        yield
    finally:
        writer.transport.abort()
        await asyncio.sleep(0)


async def test_one_who_is_too_slow_gets_no_gap_and_holds_nobody_up(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """More is released than the connection and the window hold; then it reads, up to the gap and not across it."""
    monkeypatch.setattr(recent_module, "EVENTS_AT_MOST", 5)
    async with running(configuration(tmp_path)) as service:
        async with listening(service, 0) as slow:
            await filled(service, 250)
            rows = await Listener(slow).rest()
        count = len(rows)
        assert [row["batch"] for row in rows] == list(range(1, count + 1)) and count < 250
        problem_of(await service.get(f"ordered?after={count}"), 410)
        assert (await service.document())["ledger"]["released"] == 250


async def test_one_who_takes_nothing_is_let_go(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(observe, "WRITE_WITHIN_S", 0.05)
    async with running(configuration(tmp_path)) as service:
        assert service.service._runner is not None
        server = service.service._runner.server
        async with stuck(service):
            await filled(service, 250)
            assert server is not None
            await eventually(lambda: len(server.connections) == 1, "only the sender is still connected")


async def test_a_listener_that_goes_away_is_no_error(tmp_path: Path, caplog: pytest.LogCaptureFixture) -> None:
    async with running(configuration(tmp_path)) as service:
        async with listening(service) as answer:
            answer.close()
        await filled(service, 5)
    assert not [record for record in caplog.records if record.levelname in ("WARNING", "ERROR")]


async def test_streams_end_with_the_service_and_do_not_hold_it_up(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(app_module, "SHUTDOWN_WITHIN_S", 0.05)
    async with running(configuration(tmp_path, slack="5s")) as service, listening(service) as answer:
        listens = asyncio.create_task(Listener(answer).rest())
        async with stuck(service):
            await filled(service, 250)
            await asyncio.wait_for(service.service.stop(), 10)
        assert [row["batch"] for row in await listens] == list(range(1, 246))


async def test_a_stop_waits_for_no_body(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(app_module, "SHUTDOWN_WITHIN_S", 0.05)
    over = asyncio.Event()

    async def begun() -> AsyncIterator[bytes]:
        yield b"{"
        await over.wait()

    async with running(configuration(tmp_path)) as service:
        sending = asyncio.create_task(service.post("events", begun()))
        await eventually(lambda: service.runtime.hops()["ingest"].waiting == 1)
        await asyncio.wait_for(service.service.stop(), 10)
        over.set()
        with pytest.raises(aiohttp.ClientError):
            await sending
