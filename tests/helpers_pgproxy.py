"""A proxy in front of a PostgreSQL server that breaks connections where a test wants it: on any byte, around a commit.

Bytes are passed on as they come; nothing is changed, only cut, held or swallowed.
"""

from __future__ import annotations

import asyncio
from dataclasses import dataclass, field
from typing import Self
from urllib.parse import parse_qs, urlsplit

from strandline.tasks import first_of

COMMIT = b"Q\x00\x00\x00\x0bCOMMIT\x00"  # PostgreSQL's protocol, version 3: a simple query


@dataclass(slots=True)
class _Wire:
    """One connection: whether the server's answers are kept from the client, and whether one has come since."""

    swallows: bool = False
    answered: asyncio.Event = field(default_factory=asyncio.Event)


class Proxy:
    """`dsn` leads through it. Lives on the test's loop: `async with`.

    `cut_after`: bytes that clients may still send before their connection is cut (None: no limit). `at_commit`:
    "before" cuts the connection instead of passing the next COMMIT on, "after" passes it on, waits until the server has
    answered, and cuts then. `held`: an event; until it is set, nothing is passed on. Each is used up by its cut.
    """

    def __init__(self, dsn: str) -> None:
        self._parts = urlsplit(dsn)
        self.cut_after: int | None = None
        self.at_commit: str | None = None
        self.held: asyncio.Event | None = None
        self.cuts = 0
        self.dsn = ""
        self._server: asyncio.Server | None = None
        self._tasks: set[asyncio.Task[None]] = set()

    async def __aenter__(self) -> Self:
        self._server = await asyncio.start_server(self._accept, "127.0.0.1", 0)
        port = self._server.sockets[0].getsockname()[1]
        user = self._parts.netloc.rpartition("@")[0]
        self.dsn = f"postgres://{user}@127.0.0.1:{port}{self._parts.path}?sslmode=disable"
        return self

    async def __aexit__(self, *_: object) -> None:
        assert self._server is not None
        self._server.close()
        for task in list(self._tasks):
            task.cancel()
        await asyncio.gather(*self._tasks, return_exceptions=True)

    def _accept(self, reader: asyncio.StreamReader, writer: asyncio.StreamWriter) -> None:
        task = asyncio.get_running_loop().create_task(self._connection(reader, writer))
        self._tasks.add(task)
        task.add_done_callback(self._tasks.discard)

    async def _upstream(self) -> tuple[asyncio.StreamReader, asyncio.StreamWriter]:
        folder = parse_qs(self._parts.query).get("host", [""])[0]
        if folder.startswith("/"):
            return await asyncio.open_unix_connection(f"{folder}/.s.PGSQL.{self._parts.port or 5432}")
        return await asyncio.open_connection(self._parts.hostname, self._parts.port or 5432)

    async def _connection(self, reader: asyncio.StreamReader, writer: asyncio.StreamWriter) -> None:
        wire = _Wire()
        up_reader, up_writer = await self._upstream()
        try:
            await first_of(self._up(reader, up_writer, wire), self._down(up_reader, writer, wire))
        finally:
            for each in (writer, up_writer):
                each.transport.abort()

    async def _up(self, reader: asyncio.StreamReader, writer: asyncio.StreamWriter, wire: _Wire) -> None:
        while data := await reader.read(65_536):
            if self.held is not None:
                await self.held.wait()
            passed, cut = self._judge(data)
            if cut == "after":
                wire.answered.clear()
                wire.swallows = True
            writer.write(passed)
            await writer.drain()
            if cut == "after":
                await wire.answered.wait()
            if cut:
                self.cuts += 1
                return

    def _judge(self, data: bytes) -> tuple[bytes, str]:
        """What of it is passed on, and whether the connection is cut then."""
        if self.cut_after is not None:
            left = self.cut_after
            self.cut_after = None if len(data) >= left else left - len(data)
            return data[:left], "now" if len(data) >= left else ""
        if self.at_commit is not None and COMMIT in data:
            told, self.at_commit = self.at_commit, None
            return (data, told) if told == "after" else (b"", told)
        return data, ""

    async def _down(self, reader: asyncio.StreamReader, writer: asyncio.StreamWriter, wire: _Wire) -> None:
        while data := await reader.read(65_536):
            wire.answered.set()
            if not wire.swallows:
                writer.write(data)
                await writer.drain()
