"""The contract of what the service takes, status by status, over real HTTP: events, marks, excuse, drain.

Every error is a problem details answer; that is asserted beside each by `problem_of`.
"""

from __future__ import annotations

import asyncio
import gzip
from collections.abc import AsyncIterator
from pathlib import Path

import pytest
import zstandard
from helpers_service import (
    BEGIN_S,
    FEED,
    NDJSON,
    body_of,
    configuration,
    event_line,
    events,
    eventually,
    problem_of,
    running,
)

# ---- 200 ------------------------------------------------------------------------------------------------------------


async def test_every_count_of_an_answer(tmp_path: Path) -> None:
    text = configuration(tmp_path, slack="5s", id="/id", ahead_limit="10s")
    async with running(text) as service:
        first = await service.post("events", body_of(event_line(20, id=1), event_line(10, id=2)))
        assert first.status == 200
        assert first.json == {
            "received": 2,
            "accepted": 2,
            "late": 0,
            "duplicate": 0,
            "quarantined": 0,
            "faults": [],
        }
        timely, late, again, ahead = (event_line(at, id=id) for at, id in ((15, 3), (14.5, 4), (20, 1), (10**9, 6)))
        without_time = b'{"station":"gw-1","id":5}'
        second = await service.post("events", body_of(timely, late, without_time, again, ahead))
        found = second.json
        faults = [(fault["line"], fault["reason"]) for fault in found.pop("faults")]
        assert found == {"received": 5, "accepted": 1, "late": 1, "duplicate": 1, "quarantined": 2}
        assert faults == [(3, "time_missing"), (5, "ahead")]
        assert (await service.document())["ledger"]["balanced"] is True


@pytest.mark.parametrize("coding", ["gzip", "x-gzip", "zstd", "identity", "GZIP", "gzip, zstd"])
async def test_content_codings(tmp_path: Path, coding: str) -> None:
    codings = {"gzip": gzip.compress, "x-gzip": gzip.compress, "zstd": zstandard.compress, "identity": bytes}
    body = events([1, 2, 3])
    for name in coding.lower().split(", "):
        body = codings[name](body)
    async with running(configuration(tmp_path)) as service:
        answer = await service.post("events", body, headers={"Content-Encoding": coding})
        assert (answer.status, answer.json["accepted"]) == (200, 3)


@pytest.mark.parametrize(
    ("media_type", "body"),
    [
        ("application/x-ndjson; charset=utf-8", events([1, 2])),
        ("application/jsonl", events([1, 2])),
        ("application/json", b"[" + event_line(1) + b"," + event_line(2) + b"]"),
        ("application/json", event_line(1)),
    ],
)
async def test_media_types(tmp_path: Path, media_type: str, body: bytes) -> None:
    async with running(configuration(tmp_path)) as service:
        answer = await service.post("events", body, headers={"Content-Type": media_type})
        assert answer.status == 200 and answer.json["accepted"] == answer.json["received"] > 0


async def test_an_empty_body_is_answered_with_zeros(tmp_path: Path) -> None:
    async with running(configuration(tmp_path)) as service:
        answer = await service.post("events", b"")
        assert answer.status == 200 and answer.json["received"] == 0


async def test_a_body_in_pieces_is_one_arrival(tmp_path: Path) -> None:
    """Whether a body comes in one piece or byte by byte changes nothing (DESIGN section 6)."""

    async def bytes_one_by_one() -> AsyncIterator[bytes]:
        for byte in events([5, 1, 3]):
            yield bytes([byte])

    async with running(configuration(tmp_path)) as service:
        answer = await service.post("events", bytes_one_by_one())
        assert (answer.status, answer.json["late"], answer.json["accepted"]) == (200, 0, 3)


async def test_a_repeated_key_is_answered_again_and_takes_nothing_twice(tmp_path: Path) -> None:
    """IETF draft "The Idempotency-Key HTTP Header Field": a retry is answered as the first was."""
    async with running(configuration(tmp_path)) as service:
        headers = {"Idempotency-Key": '"8e03978e-40d5-43e8-bc93-6894a57f9324"'}
        first = await service.post("events", events([1, 2]), headers=headers)
        again = await service.post("events", events([1, 2]), headers=headers)
        assert first.status == again.status == 200 and first.json == again.json
        assert (await service.document())["ledger"]["received"] == 2
        problem_of(await service.post("events", events([3]), headers=headers), 422, "key_reused")
        problem_of(await service.post("events", events([3]), headers={"Idempotency-Key": "bare"}), 400)


# ---- what is not there ----------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    "path", ["/nothing", "/v1", "/v1/feeds/", "/v2/feeds", f"/v1/feeds/{FEED}/nothing", "/metrics/"]
)
async def test_an_address_that_does_not_exist(tmp_path: Path, path: str) -> None:
    async with running(configuration(tmp_path)) as service:
        assert "openapi.json" in problem_of(await service.get(path), 404)


@pytest.mark.parametrize("path", ["events", "marks", "excuse", "drain"])
async def test_a_feed_that_does_not_exist_is_named_with_those_that_do(tmp_path: Path, path: str) -> None:
    async with running(configuration(tmp_path)) as service:
        detail = problem_of(await service.post(f"/v1/feeds/sea-gauges/{path}", b""), 404)
        assert "sea-gauges" in detail and FEED in detail


@pytest.mark.parametrize(("method", "path", "allowed"), [("GET", "events", "POST"), ("POST", "sources", "GET,HEAD")])
async def test_a_method_that_is_not_possible(tmp_path: Path, method: str, path: str, allowed: str) -> None:
    """RFC 9110 section 15.5.6: a 405 must say in Allow which methods there are."""
    async with running(configuration(tmp_path)) as service:
        answer = await service.ask(method, path)
        assert method in problem_of(answer, 405) and answer.headers["Allow"] == allowed


# ---- bodies that are refused ----------------------------------------------------------------------------------------


async def test_a_body_that_does_not_come(tmp_path: Path) -> None:
    over = asyncio.Event()

    async def some_and_no_more() -> AsyncIterator[bytes]:
        yield event_line(1)
        await over.wait()

    async with running(configuration(tmp_path, top='[limits]\nbody_within = "50ms"')) as service:
        answer = await service.post("events", some_and_no_more())
        over.set()
        assert f"{len(event_line(1))} bytes came" in problem_of(answer, 408)
        assert (await service.send([1]))["accepted"] == 1


@pytest.mark.parametrize("chunked", [False, True])
async def test_a_body_that_is_too_large_as_it_is_sent(tmp_path: Path, chunked: bool) -> None:
    body = events(range(20))

    async def in_chunks() -> AsyncIterator[bytes]:
        for start in range(0, len(body), 100):
            yield body[start : start + 100]

    text = configuration(tmp_path, body_bytes_at_most=f"{len(body) - 1}B")
    async with running(text) as service:
        answer = await service.post("events", in_chunks() if chunked else body)
        assert "body_bytes_at_most" in problem_of(answer, 413)
        assert (await service.document())["ledger"]["received"] == 0
    async with running(text.replace(f"{len(body) - 1}B", f"{len(body)}B")) as service:
        answer = await service.post("events", in_chunks() if chunked else body)
        assert (answer.status, answer.json["accepted"]) == (200, 20)


async def test_a_body_that_is_too_large_once_it_is_decompressed(tmp_path: Path) -> None:
    limits = {"decoded_bytes_at_most": "4KiB", "event_bytes_at_most": "4KiB", "body_bytes_at_most": "4KiB"}
    async with running(configuration(tmp_path, **limits)) as service:
        for coding, body in (("gzip", gzip.compress(bytes(10**6))), ("zstd", zstandard.compress(bytes(10**6)))):
            answer = await service.post("events", body, headers={"Content-Encoding": coding})
            assert "4,096 bytes" in problem_of(answer, 413)


async def test_too_many_events_in_one_request(tmp_path: Path) -> None:
    async with running(configuration(tmp_path, events_at_most=3)) as service:
        problem_of(await service.post("events", events(range(4))), 413)
        assert (await service.send(range(3)))["accepted"] == 3


@pytest.mark.parametrize("coding", ["br", "deflate", "gzip, br", "gzip, gzip, gzip"])
async def test_a_coding_that_is_not_known_is_answered_with_those_that_are(tmp_path: Path, coding: str) -> None:
    """RFC 9110 section 15.5.16: where the coding is at fault, the 415 says in Accept-Encoding what is taken."""
    async with running(configuration(tmp_path)) as service:
        answer = await service.post("events", events([1]), headers={"Content-Encoding": coding})
        problem_of(answer, 415)
        assert answer.headers["Accept-Encoding"] == "gzip, zstd"


@pytest.mark.parametrize("media_type", ["text/plain", "application/xml", "application/x-ndjson; charset=latin-1"])
async def test_a_media_type_that_is_not_taken(tmp_path: Path, media_type: str) -> None:
    """The same section: a 415 for another reason must not carry Accept-Encoding."""
    async with running(configuration(tmp_path)) as service:
        answer = await service.post("events", events([1]), headers={"Content-Type": media_type})
        assert NDJSON in problem_of(answer, 415)
        assert "Accept-Encoding" not in answer.headers


@pytest.mark.parametrize(
    ("media_type", "coding", "body"),
    [
        ("application/json", "", b"[{]"),
        ("application/json", "", b"17"),
        (NDJSON, "gzip", b"no gzip"),
        pytest.param(NDJSON, "gzip", gzip.compress(events([1]), mtime=0)[:-9], id="gzip cut short"),
        pytest.param(NDJSON, "zstd", zstandard.compress(events([1]))[:-1], id="zstd cut short"),
    ],
)
async def test_a_body_that_is_not_what_it_says(tmp_path: Path, media_type: str, coding: str, body: bytes) -> None:
    async with running(configuration(tmp_path)) as service:
        headers = {"Content-Type": media_type, **({"Content-Encoding": coding} if coding else {})}
        problem_of(await service.post("events", body, headers=headers), 422)
        assert (await service.document())["ledger"]["received"] == 0


async def test_a_client_that_goes_away_leaves_nothing_behind(tmp_path: Path, caplog: pytest.LogCaptureFixture) -> None:
    async with running(configuration(tmp_path)) as service:
        for broken in (b"5\r\n{", b"zz\r\n", b"5\r\n{}{}{}{}{}\r\n"):
            reader, writer = await asyncio.open_connection(service.service.address.host, service.service.address.port)
            head = f"POST /v1/feeds/{FEED}/events HTTP/1.1\r\nHost: localhost\r\nContent-Type: {NDJSON}\r\n"
            writer.write(head.encode() + b"Transfer-Encoding: chunked\r\n\r\n" + broken)
            await writer.drain()
            writer.write_eof()
            answer = await reader.read()
            assert answer == b"" or answer.split(b" ")[1] == b"400", answer
            writer.close()
            await eventually(lambda: service.runtime.hops()["ingest"].waiting == 0)
        assert (await service.document())["ledger"]["received"] == 0
        assert (await service.send([1]))["accepted"] == 1
    assert not [record for record in caplog.records if "unforeseen" in record.message]


# ---- marks, excuse, drain -------------------------------------------------------------------------------------------


async def test_a_promise_moves_the_watermark(tmp_path: Path) -> None:
    async with running(configuration(tmp_path)) as service:
        await service.send([5], "gw-1")
        await service.send([9], "gw-2")
        assert (await service.document())["held"]["events"] == 1
        promise = {"source": "gw-1", "time": "2023-11-14T22:13:29Z"}  # BEGIN_S + 9
        answer = await service.post("marks", promise)
        assert (answer.status, answer.content) == (204, b"")
        document = await service.document()
        assert document["held"]["events"] == 0 and document["watermark_ns"] == (BEGIN_S + 9) * 10**9


async def test_promises_that_are_refused(tmp_path: Path) -> None:
    async with running(configuration(tmp_path, ahead_limit="10s")) as service:
        ahead = {"source": "gw-1", "time": "2200-01-01T00:00:00Z"}
        answer = await service.post("marks", ahead)
        assert "beyond the arrival clock" in problem_of(answer, 422, "promise_ahead")
        assert "Retry-After" not in answer.headers
        for wrong in (
            {"source": "gw-1", "time": "yesterday"},
            {"source": "", "time": "2023-01-01T00:00:00Z"},
            {"source": "é" * 129, "time": "2023-01-01T00:00:00Z"},
            {"source": "gw-1"},
            {"source": "gw-1", "time": "2023-01-01T00:00:00Z", "more": 1},
            [],
        ):
            problem_of(await service.post("marks", wrong), 422)
        problem_of(await service.ask("POST", "marks", data=b"{"), 422)
        problem_of(await service.ask("POST", "marks", data=b'"\xff"'), 422)
        problem_of(await service.ask("POST", "marks", data=b" " * 20_000), 413)
        assert (await service.document())["sources"]["known"] == 0


async def test_a_feed_of_one_source_takes_promises_of_that_one_only(tmp_path: Path) -> None:
    """Another would be a source that never speaks, and hold the feed until it fell idle."""
    text = configuration(tmp_path).replace('source = "/station"\n', "")
    async with running(text) as service:
        await service.send([5])
        promise = {"time": "2023-11-14T22:13:29Z"}
        assert FEED in problem_of(await service.post("marks", {"source": "gw-1", **promise}), 404)
        assert (await service.post("marks", {"source": FEED, **promise})).status == 204


async def test_an_excused_source_holds_nothing_until_it_speaks(tmp_path: Path) -> None:
    async with running(configuration(tmp_path)) as service:
        await service.send([5], "gw-1")
        await service.send([9], "gw-2")
        assert (await service.document())["hold"]["source"] == "gw-1"
        answer = await service.post("excuse", {"source": "gw-1", "reason": "its mast is down"})
        assert (answer.status, answer.content) == (204, b"")
        document = await service.document()
        assert document["held"]["events"] == 0 and document["ledger"]["released"] == 2
        sources = (await service.get("sources")).json["sources"]
        assert [(source["source"], source["excused"]) for source in sources] == [("gw-1", True), ("gw-2", False)]
        assert (await service.send([9, 10], "gw-1"))["accepted"] == 2
        assert (await service.document())["hold"]["source"] == "gw-2"
        assert "gw-7" in problem_of(await service.post("excuse", {"source": "gw-7"}), 404)


async def test_a_drain_of_nothing_is_answered_too(tmp_path: Path) -> None:
    """It leaves no record, so no sync comes after it: what is to be answered is durable already."""
    async with running(configuration(tmp_path)) as service:
        for _ in range(2):
            assert (await service.post("drain")).status == 204
        await service.send([1])
        await eventually(lambda: service.runtime.journal.durable_lsn == service.runtime.feed.next_lsn)
        assert (await service.post("drain")).status == 204


async def test_a_drain_releases_all_in_order_and_what_is_older_is_late(tmp_path: Path) -> None:
    async with running(configuration(tmp_path, slack="1h")) as service:
        await service.send([5, 1, 9])
        assert (await service.post("drain")).status == 204
        document = await service.document()
        assert document["ledger"]["released"] == 3 and document["held"]["events"] == 0
        assert (await service.send([8, 9]))["late"] == 1
        assert (await service.post("drain")).status == 204
