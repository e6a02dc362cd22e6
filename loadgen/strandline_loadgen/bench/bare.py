"""The yardstick of the service rows: an HTTP handler that decodes, journals and forgets, with nothing in between.

It reads a body, decodes the two members that a feed names, writes the body with its CRC to a file, answers once that is
synced (one sync for all who wait), and keeps nothing. So it does what any durable ingest must do, and no ordering, no
books, no sinks. Run as `python -m strandline_loadgen.bench.bare PORT FOLDER`; with `discard` behind it, bodies are read
and nothing else is done: the limit that aiohttp sets.
"""

from __future__ import annotations

import asyncio
import os
import sys
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path

import google_crc32c
import msgspec
import uvloop
from aiohttp import web

from .path import TwoMembers

FILE_BYTES = 512 << 20  # written round and round, so that the file stays of one size, reserved beforehand
BODY_BYTES_AT_MOST = 64 << 20


class RoundFile:
    """A file that is appended to in groups: while one sync runs the next group gathers."""

    def __init__(self, path: Path) -> None:
        self._file = os.open(path, os.O_RDWR | os.O_CREAT, 0o600)
        os.posix_fallocate(self._file, 0, FILE_BYTES)
        os.fsync(self._file)
        self._at = 0
        self._group: list[bytes] = []
        self._waiting: list[asyncio.Future[None]] = []
        self._task: asyncio.Task[None] | None = None
        self._worker = ThreadPoolExecutor(1)

    async def append(self, body: bytes) -> None:
        """Return once the body is durable."""
        self._group += [google_crc32c.value(body).to_bytes(4, "little"), len(body).to_bytes(4, "little"), body]
        done = asyncio.get_running_loop().create_future()
        self._waiting.append(done)
        if self._task is None:
            self._task = asyncio.create_task(self._flush())
        await done

    async def _flush(self) -> None:
        loop = asyncio.get_running_loop()
        while self._waiting:
            group, waiting = self._group, self._waiting
            self._group, self._waiting = [], []
            await loop.run_in_executor(self._worker, self._write, b"".join(group))
            for done in waiting:
                if not done.done():
                    done.set_result(None)
        self._task = None

    def _write(self, block: bytes) -> None:
        if self._at + len(block) > FILE_BYTES:
            self._at = 0
        os.pwrite(self._file, block, self._at)
        os.fdatasync(self._file)
        self._at += len(block)


def make_app(folder: Path, *, discard: bool = False) -> web.Application:
    """The handler, at the address where the service takes events."""
    journal = RoundFile(folder / "bare.journal")
    decode_lines = msgspec.json.Decoder(TwoMembers).decode_lines

    async def take(request: web.Request) -> web.Response:
        body = await request.read()
        received = len(decode_lines(body))
        await journal.append(body)
        counts = {"received": received, "accepted": received, "late": 0, "duplicate": 0, "quarantined": 0}
        return web.Response(body=msgspec.json.encode(counts), content_type="application/json")

    async def drop(request: web.Request) -> web.Response:
        received = (await request.read()).count(b"\n")
        counts = {"received": received, "accepted": received, "late": 0, "duplicate": 0, "quarantined": 0}
        return web.Response(body=msgspec.json.encode(counts), content_type="application/json")

    async def ready(request: web.Request) -> web.Response:
        return web.Response(body=b'{"ready":true}', content_type="application/json")

    app = web.Application(client_max_size=BODY_BYTES_AT_MOST)
    app.add_routes([web.post("/v1/feeds/{feed}/events", drop if discard else take), web.get("/health/ready", ready)])
    return app


def main(port: int, folder: Path, what: str = "") -> None:
    """Serve until SIGTERM."""
    loop = uvloop.new_event_loop()
    app = make_app(folder, discard=what == "discard")
    web.run_app(app, host="127.0.0.1", port=port, loop=loop, print=None, access_log=None)


if __name__ == "__main__":
    main(int(sys.argv[1]), Path(sys.argv[2]), *sys.argv[3:])
