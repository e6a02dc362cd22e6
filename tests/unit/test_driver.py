"""The sender: schedule, refusals, broken connections and bounds, against a small server that answers by script."""

from __future__ import annotations

import asyncio
import gzip
from collections.abc import AsyncIterator, Awaitable, Callable
from contextlib import asynccontextmanager
from typing import Any

import numpy as np
import pytest
import zstandard
from aiohttp import web
from aiohttp.test_utils import TestServer
from strandline_loadgen.bodies import Body, bodies, cut_by_count
from strandline_loadgen.checker import Rows, judge
from strandline_loadgen.driver import (
    NEVER_NS,
    Target,
    as_arrived,
    at_once,
    every,
    is_loopback,
    retry_after_s,
    send,
)
from strandline_loadgen.shapes import shape

Handler = Callable[[web.Request], Awaitable[web.StreamResponse]]


class Ear:
    """A server that keeps what it accepted and answers as its script says: a status a request, 200 after the end."""

    def __init__(self, *script: int | str) -> None:
        self.script = list(script)
        self.requests: list[dict[str, str]] = []
        self.accepted: list[bytes] = []
        self.gate: asyncio.Event | None = None
        self.waiting = 0
        self.three_wait = asyncio.Event()

    async def hear(self, request: web.Request) -> web.StreamResponse:
        self.waiting += 1
        if self.waiting == 3:
            self.three_wait.set()
        content = await request.content.read()  # as it came: aiohttp has decoded gzip already, zstd perhaps
        self.requests.append(dict(request.headers) | {"path": request.path})
        if self.gate:
            await self.gate.wait()
        self.waiting -= 1
        step = self.script.pop(0) if self.script else 200
        if step == "break":
            assert request.transport is not None
            request.transport.abort()
            return web.Response()
        if step == "nonsense":
            return web.Response(text="[1")
        if step != 200:
            return web.Response(status=int(step), headers={"Retry-After": "0"}, text="not now")
        self.accepted.append(content)
        lines = content.count(b"\n")
        faults = [{"line": 2, "reason": "ahead", "detail": "from tomorrow"}] if lines > 2 else []
        counts = {"received": lines, "accepted": lines - len(faults), "late": 0, "duplicate": 0}
        return web.json_response(counts | {"quarantined": len(faults), "faults": faults})


@asynccontextmanager
async def listening(ear: Ear) -> AsyncIterator[str]:
    app = web.Application(client_max_size=2**26)
    app.router.add_post("/v1/feeds/{feed}/events", ear.hear)
    async with TestServer(app) as server:
        yield str(server.make_url("/"))


TRACE = shape("jitter", 100, 1)
BOUNDS = cut_by_count(TRACE, 10)
BODIES = list(bodies(TRACE, BOUNDS))
WHOLE = b"".join(body.payload for body in BODIES)


async def test_every_body_is_sent_once_and_the_sums_are_added_up() -> None:
    async with listening(ear := Ear()) as url:
        done = await send(BODIES, Target(url, "river", connections=3))
    assert sorted(ear.accepted) == sorted(body.payload for body in BODIES)
    assert done.sums == {"received": 100, "accepted": 90, "late": 0, "duplicate": 0, "quarantined": 10}
    assert sorted(done.faults) == [(number, 2, "ahead") for number in range(10)]
    assert done.answered.all()
    assert np.all(done.latencies_s > 0)
    assert np.all(done.ends_ns > done.begins_ns)
    assert {request["path"] for request in ear.requests} == {"/v1/feeds/river/events"}
    assert {request["Content-Type"] for request in ear.requests} == {"application/x-ndjson"}
    assert not done.failures
    assert done.refused == done.resent == 0


async def test_one_connection_keeps_the_order() -> None:
    async with listening(ear := Ear()) as url:
        await send(BODIES, Target(url, "river", connections=1))
    assert b"".join(ear.accepted) == WHOLE


@pytest.mark.parametrize(("encoding", "opened"), [("gzip", gzip.decompress), ("zstd", zstandard.decompress)])
async def test_bodies_are_compressed_in_turn(encoding: str, opened: Any) -> None:
    heard: list[tuple[str, bytes]] = []

    async def hear(request: web.Request) -> web.Response:
        heard.append((request.headers.get("Content-Encoding", "none"), await request.content.read()))
        return web.json_response(dict.fromkeys(("received", "accepted", "late", "duplicate", "quarantined"), 1))

    runner = web.ServerRunner(web.Server(hear, auto_decompress=False))
    await runner.setup()
    site = web.TCPSite(runner, "127.0.0.1", 0)
    await site.start()
    port = runner.addresses[0][1]
    try:
        target = Target(f"http://127.0.0.1:{port}", "r", connections=1, encodings=(encoding, "identity"))
        await send(BODIES, target)
    finally:
        await runner.cleanup()
    assert [name for name, _ in heard] == [encoding, "none"] * 5
    assert b"".join(opened(content) if name != "none" else content for name, content in heard) == WHOLE


async def test_refusals_are_tried_again_under_the_same_key() -> None:
    async with listening(ear := Ear(429, 503, 429)) as url:
        done = await send(BODIES, Target(url, "river", connections=1))
    assert done.refused == 3
    assert done.answered.all()
    assert b"".join(ear.accepted) == WHOLE
    keys = [request["Idempotency-Key"] for request in ear.requests]
    assert keys == ['"load-0"'] * 3 + [f'"load-{number}"' for number in range(10)]


async def test_a_broken_connection_is_answered_by_sending_again() -> None:
    async with listening(ear := Ear(200, "break", "break")) as url:
        done = await send(BODIES, Target(url, "river", connections=1))
    assert done.resent >= 2
    assert b"".join(ear.accepted) == WHOLE
    assert [request["Idempotency-Key"] for request in ear.requests[1:4]] == ['"load-1"'] * 3


async def test_a_refusal_for_good_is_no_success_and_the_rest_goes_on() -> None:
    async with listening(ear := Ear(200, 422, "nonsense")) as url:
        done = await send(BODIES, Target(url, "river", connections=1))
    assert done.answered.tolist() == [True, False, False] + [True] * 7
    assert done.ends_ns[1] == NEVER_NS
    assert done.failures[0] == "body 1: 422 not now"
    assert done.failures[1].startswith("body 2: the answer cannot be read")
    assert len(ear.requests) == 10
    sent = done.evidence(TRACE, BOUNDS)
    kept = np.repeat(done.answered, 10)
    assert judge(sent, Rows(TRACE.ids[kept], TRACE.times[kept], TRACE.sources[kept])).lost == 0
    assert int(np.count_nonzero(~sent.promised)) == 20


async def test_tries_and_bodies_are_bounded() -> None:
    async with listening(ear := Ear(*[503] * 100)) as url:
        done = await send(BODIES, Target(url, "river", connections=1, tries_at_most=3, bodies_at_most=2))
    assert len(ear.requests) == 6
    assert len(done.latencies_s) == 2
    assert not done.answered.any()
    assert len(done.evidence(TRACE, BOUNDS).rows) == 20


async def test_time_is_bounded() -> None:
    ear = Ear()
    ear.gate = asyncio.Event()
    async with listening(ear) as url:
        done = await send(BODIES, Target(url, "river", connections=2, seconds_at_most=0.3))
        ear.gate.set()
    assert 0.3 <= done.seconds < 5
    assert not done.answered.any()
    assert "no answer (TimeoutError" in done.failures[0]


async def test_latency_counts_from_the_due_time_not_from_the_sending() -> None:
    """All ten are due at once and one connection takes them in turn: each later one has waited longer."""
    async with listening(Ear()) as url:
        done = await send(BODIES, Target(url, "river", connections=1), at_once)
    assert np.all(np.diff(done.latencies_s) > 0)
    last_alone = (done.ends_ns[-1] - done.begins_ns[-1]) / 1e9
    assert done.latencies_s[-1] > 2 * last_alone


async def test_the_schedule_does_not_wait_for_answers() -> None:
    """Nothing is answered until three requests are open at the same time."""
    ear = Ear()
    ear.gate = asyncio.Event()
    async with listening(ear) as url:
        sending = asyncio.create_task(send(BODIES, Target(url, "river", connections=3), every(0.01)))
        async with asyncio.timeout(10):
            await ear.three_wait.wait()
        ear.gate.set()
        done = await sending
    assert done.answered.all()
    assert done.seconds >= 0.09


def test_schedules() -> None:
    assert [every(0.5)(body) for body in BODIES[:3]] == [0, 0.5, 1]
    assert {at_once(body) for body in BODIES} == {0.0}
    plan = as_arrived(TRACE, speed=2.0)
    assert [plan(body) for body in BODIES] == [
        (TRACE.arrivals[body.stop - 1] - TRACE.arrivals[0]) / 2e9 for body in BODIES
    ]
    assert as_arrived(TRACE.part(0, 0))(Body(0, 0, 0, 0, b"")) == 0


@pytest.mark.parametrize(
    ("url", "loopback"),
    [
        ("http://127.0.0.1:8600", True),
        ("http://127.8.9.1", True),
        ("http://localhost:1", True),
        ("http://[::1]:8600", True),
        ("http://192.168.1.2:8600", False),
        ("http://0.0.0.0:8600", False),
        ("http://gauge.example", False),
        ("http://localhost.gauge.example", False),
        ("/v1", False),
    ],
)
def test_only_this_machine_is_a_target(url: str, loopback: bool) -> None:
    assert is_loopback(url) == loopback
    if not loopback:
        with pytest.raises(ValueError, match="not an address of this machine"):
            Target(url, "river")
        assert Target(url, "river", anywhere=True).url == url


@pytest.mark.parametrize("wrong", [{"connections": 0}, {"encodings": ("br",)}, {"encodings": ()}, {"tries_at_most": 0}])
def test_bounds_that_make_no_sense_are_refused(wrong: dict[str, Any]) -> None:
    with pytest.raises(ValueError, match=r"encodings are|must be"):
        Target("http://127.0.0.1", "river", **wrong)


# RFC 9110, 10.2.3 and 5.6.7: delay-seconds are digits only; all three date forms must be read.
NOV_6_1994 = 784111777


@pytest.mark.parametrize(
    ("header", "now", "seconds"),
    [
        ("120", 0, 120),
        ("0", 0, 0),
        ("Fri, 31 Dec 1999 23:59:59 GMT", 946684799 - 30, 30),
        ("Sun, 06 Nov 1994 08:49:37 GMT", NOV_6_1994 - 7, 7),
        ("Sunday, 06-Nov-94 08:49:37 GMT", NOV_6_1994 - 7, 7),
        ("Sun Nov  6 08:49:37 1994", NOV_6_1994 - 7, 7),
        ("Sun, 06 Nov 1994 08:49:37 GMT", NOV_6_1994 + 7, 0),
        ("-1", 0, 0.25),
        ("1.5", 0, 0.25),
        ("", 0, 0.25),
        ("+5", 0, 0.25),
        (None, 0, 0.25),
    ],
)
def test_retry_after(header: str | None, now: float, seconds: float) -> None:
    assert retry_after_s(header, 0.25, now) == seconds
