"""A receiver of batches over HTTP for tests of sinks: a real server that recognises repeats and does what it is told.

It runs on a loop in a thread of its own, so that tests on a loop and tests without one can use it alike.
"""

from __future__ import annotations

import asyncio
import gzip
import threading
from collections import deque
from dataclasses import dataclass, field
from typing import Any

from aiohttp import web


@dataclass(frozen=True, slots=True)
class Request:
    """One request as it came; `content` is the body, decompressed."""

    path: str
    headers: dict[str, str]
    raw: bytes

    @property
    def key(self) -> str:
        return self.headers["Idempotency-Key"]

    @property
    def content(self) -> bytes:
        return gzip.decompress(self.raw) if self.headers.get("Content-Encoding") == "gzip" else self.raw


@dataclass(frozen=True, slots=True)
class Answer:
    """What to answer. `take`: keep the batch. `then`: "close" ends the connection without an answer, "hang" waits."""

    status: int = 200
    headers: dict[str, str] = field(default_factory=dict)
    body: bytes = b""
    take: bool = True
    then: str = "answer"


LOSE = Answer(then="close")  # takes the batch, and nobody hears of it
DROP = Answer(then="close", take=False)


def refuse(status: int, body: bytes = b"", **headers: str) -> Answer:
    """An answer that takes nothing; in a header's name `_` stands for `-`."""
    return Answer(status, {name.replace("_", "-"): value for name, value in headers.items()}, body, take=False)


class Receiver:
    """Keeps the first body of each key, by path. `script` says what the next requests get; without one all is well."""

    def __init__(self) -> None:
        self.requests: list[Request] = []
        self.kept: dict[str, dict[str, Request]] = {}
        self.script: deque[Answer] = deque()
        self.faults: list[str] = []
        self.go_on = threading.Event()
        self.reached = threading.Semaphore(0)  # released once for each request that has come
        self._loop = asyncio.new_event_loop()
        self._thread = threading.Thread(target=self._loop.run_forever, name="receiver", daemon=True)
        self._runner: web.AppRunner | None = None
        self.url = ""

    def __enter__(self) -> Receiver:
        self._thread.start()
        self._do(self._start())
        return self

    def __exit__(self, *_: object) -> None:
        self.go_on.set()
        assert self._runner is not None
        self._do(self._runner.cleanup())
        self._loop.call_soon_threadsafe(self._loop.stop)
        self._thread.join()
        self._loop.close()

    def _do(self, work: Any) -> None:
        asyncio.run_coroutine_threadsafe(work, self._loop).result(30)

    async def _start(self) -> None:
        app = web.Application(client_max_size=2**30)
        app.router.add_route("*", "/{path:.*}", self._handle)
        self._runner = web.AppRunner(app, auto_decompress=False, access_log=None, shutdown_timeout=0.1)
        await self._runner.setup()
        site = web.TCPSite(self._runner, "127.0.0.1", 0)
        await site.start()
        self.url = f"http://127.0.0.1:{self._runner.addresses[0][1]}"

    async def _handle(self, request: web.Request) -> web.StreamResponse:
        came = Request(request.path, dict(request.headers), await request.read())
        self.requests.append(came)
        told = self.script.popleft() if self.script else Answer()
        self.reached.release()
        if told.take:
            first = self.kept.setdefault(came.path, {}).setdefault(came.key, came)
            if first.content != came.content:
                self.faults.append(f"{came.key} came again with another body")
        if told.then == "hang":
            await asyncio.to_thread(self.go_on.wait, 60)
        if told.then == "close":
            assert request.transport is not None
            request.transport.abort()
        return web.Response(status=told.status, headers=told.headers, body=told.body)

    def lines(self, path: str, prefix: str) -> list[bytes]:
        """The lines of the kept batches whose keys begin so, in order of their numbers."""
        found = {key: batch for key, batch in self.kept.get(path, {}).items() if key.startswith(f'"{prefix}-')}
        ordered = sorted(found, key=lambda key: int(key.strip('"').rpartition("-")[2]))
        return [line for key in ordered for line in found[key].content.split(b"\n")[:-1]]
