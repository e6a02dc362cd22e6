"""A proxy in front of a NATS server that loses an answer, or lets nothing through, where a test wants it.

Bytes are passed on as they come; nothing is changed, only swallowed, held or cut.
"""

from __future__ import annotations

import asyncio
import contextlib
from typing import Self

from strandline.tasks import first_of

CHUNK_BYTES = 1 << 20


class BrokerProxy:
    """`url` leads through it. Lives on the test's loop: `async with`.

    `swallow`: the next bytes from the server with this in them never arrive (used up by that). `away`: while true,
    nobody can connect, and `cut` has let go of those who were.
    """

    def __init__(self, port: int) -> None:
        self._port = port
        self.swallow: bytes | None = None
        self.away = False
        self.url = ""
        self._server: asyncio.Server | None = None
        self._tasks: set[asyncio.Task[None]] = set()

    async def __aenter__(self) -> Self:
        self._server = await asyncio.start_server(self._accept, "127.0.0.1", 0)
        self.url = f"nats://127.0.0.1:{self._server.sockets[0].getsockname()[1]}"
        return self

    async def __aexit__(self, *_: object) -> None:
        assert self._server is not None
        self._server.close()
        await self.cut()

    async def cut(self) -> None:
        """Cut all connections."""
        tasks = list(self._tasks)
        for task in tasks:
            task.cancel()
        await asyncio.gather(*tasks, return_exceptions=True)

    def _accept(self, reader: asyncio.StreamReader, writer: asyncio.StreamWriter) -> None:
        task = asyncio.get_running_loop().create_task(self._connection(reader, writer))
        self._tasks.add(task)
        task.add_done_callback(self._tasks.discard)

    async def _connection(self, reader: asyncio.StreamReader, writer: asyncio.StreamWriter) -> None:
        other: asyncio.StreamWriter | None = None
        try:
            if self.away:
                return
            answers, other = await asyncio.open_connection("127.0.0.1", self._port)
            await first_of(self._pass(reader, other, False), self._pass(answers, writer, True))
        finally:
            for each in (writer, *([other] if other else [])):
                each.close()
                with contextlib.suppress(OSError):
                    await each.wait_closed()

    async def _pass(self, reader: asyncio.StreamReader, writer: asyncio.StreamWriter, answers: bool) -> None:
        while chunk := await reader.read(CHUNK_BYTES):
            if answers and self.swallow is not None and self.swallow in chunk:
                self.swallow = None
                continue
            writer.write(chunk)
            await writer.drain()
