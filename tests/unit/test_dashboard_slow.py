"""Browsers that read slowly or not at all, on a real socket: they skip moments, hold nothing up, and are let go."""

from __future__ import annotations

import asyncio
import json
import re
import socket
from collections.abc import AsyncIterator
from contextlib import asynccontextmanager, suppress
from itertools import pairwise
from pathlib import Path

import pytest
from helpers_service import DEADLINE_S, Running, body_of, configuration, event_line, eventually, running
from helpers_watches import watch_of
from strandline.dashboard import live
from strandline.dashboard.live import Watch

SOURCES = 100  # with names of 250 bytes: a moment is some 50 KB, so few of them fill the sockets in between


@pytest.fixture(autouse=True)
def quick(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(live, "EVERY_S", 0.005)


@asynccontextmanager
async def stuck(service: Running) -> AsyncIterator[tuple[asyncio.StreamReader, asyncio.Transport]]:
    """One that has asked for moments and reads nothing yet; it has little room for what comes."""
    address = service.service.address
    wire = socket.socket()
    wire.setsockopt(socket.SOL_SOCKET, socket.SO_RCVBUF, 4096)
    wire.connect((address.host, address.port))
    reader, writer = await asyncio.open_connection(sock=wire, limit=2**21)
    writer.transport.pause_reading()  # type: ignore[attr-defined]
    writer.write(b"GET /v1/feeds/river-gauges/live?lanes=100 HTTP/1.1\r\nHost: localhost\r\nConnection: close\r\n\r\n")
    try:
        yield reader, writer.transport  # type: ignore[misc]
    finally:
        writer.transport.abort()
        with suppress(ConnectionError):
            await writer.wait_closed()


async def filled(service: Running) -> Watch:
    """The watch of a feed with many sources of long names."""
    lines = [event_line(100, f"{number:02}" + "x" * 248) for number in range(SOURCES)]
    assert (await service.post("events", body_of(*lines))).json["accepted"] == SOURCES
    return watch_of(service)


def waiting_bytes(service: Running) -> int:
    """Bytes that wait in this process for the browsers."""
    assert service.service._runner is not None and service.service._runner.server is not None
    transports = [protocol.transport for protocol in service.service._runner.server.connections]
    return sum(wire.get_write_buffer_size() for wire in transports if wire is not None)  # type: ignore[attr-defined]


async def test_a_slow_browser_skips_moments_and_no_more_than_one_waits_for_it(tmp_path: Path) -> None:
    async with running(configuration(tmp_path)) as service:
        watch = await filled(service)
        async with stuck(service) as (reader, transport):
            await eventually(lambda: waiting_bytes(service) > 0)
            stuck_at = watch.computed
            frame = max(len(frame) for frame in watch._frames.values())
            greatest = 0

            def fifty_more() -> bool:
                nonlocal greatest
                greatest = max(greatest, waiting_bytes(service))
                return watch.computed >= stuck_at + 50

            await eventually(fifty_more)
            assert greatest <= frame + 1000
            transport.resume_reading()  # type: ignore[attr-defined]
            text = b""
            async with asyncio.timeout(DEADLINE_S):
                while len(re.findall(rb"id: \d+", text)) < 8 or not text.endswith(b"\n\n\r\n"):
                    text += (more := await reader.read(2**16))
                    assert more, "the stream has ended"
            instants = [int(number) for number in re.findall(rb"\nid: (\d+)", text)]
            assert instants == sorted(set(instants)), "moments come in order, and none twice"
            # Those that were computed while it was stuck were skipped but for what was on its way.
            assert max(later - first for first, later in pairwise(instants)) >= 50 * 5 * 0.5
        await eventually(lambda: watch.streams == 0)


async def test_a_browser_that_takes_nothing_is_let_go(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(live, "WRITE_WITHIN_S", 0.1)
    async with running(configuration(tmp_path)) as service:
        watch = await filled(service)
        async with stuck(service) as (reader, transport):
            await eventually(lambda: watch.streams == 1)
            await eventually(lambda: watch.streams == 0, "it is let go")
            assert watch._task is None
            transport.resume_reading()  # type: ignore[attr-defined]
            with suppress(ConnectionError):
                async with asyncio.timeout(DEADLINE_S):
                    while await reader.read(2**16):
                        pass
        assert (await service.document())["ledger"]["received"] == SOURCES


async def test_a_browser_that_goes_away_is_no_error(tmp_path: Path, caplog: pytest.LogCaptureFixture) -> None:
    async with running(configuration(tmp_path)) as service:
        watch = await filled(service)
        async with stuck(service):
            await eventually(lambda: watch.streams == 1)
        await eventually(lambda: watch.streams == 0)
        async with service.session.get(f"{service.feed_url}/live") as answer:
            line = await answer.content.readline()
            assert json.loads(line.partition(b": ")[2]) == 1000
            answer.close()
        await eventually(lambda: watch.streams == 0)
    assert not [record for record in caplog.records if record.levelname in ("WARNING", "ERROR")]
