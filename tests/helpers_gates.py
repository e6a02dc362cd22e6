"""A network between a process and servers that can fall silent: bytes wait, connections stay open, nothing is refused.

That is what a cut cable looks like from both ends. When it is mended, what waited arrives late, as with TCP. Runs in a
thread with a loop of its own, so that a test need not be on one.
"""

from __future__ import annotations

import asyncio
import contextlib
import threading
from collections.abc import Sequence
from typing import Self

from strandline.tasks import first_of

CHUNK_BYTES = 1 << 16
START_S = 10.0


class Gates:
    """One gate before each of these ports of the loopback address; `urls` lead through them. `with` opens them."""

    def __init__(self, ports: Sequence[int]) -> None:
        self._targets, self.ports = list(ports), list[int]()
        self._loop = asyncio.new_event_loop()
        self._passing = asyncio.Event()
        self._passing.set()
        self._servers: list[asyncio.Server] = []
        self._tasks: set[asyncio.Task[None]] = set()
        self._thread = threading.Thread(target=self._loop.run_forever, name="gates", daemon=True)

    def __enter__(self) -> Self:
        self._thread.start()
        asyncio.run_coroutine_threadsafe(self._listen(), self._loop).result(START_S)
        return self

    def __exit__(self, *_: object) -> None:
        asyncio.run_coroutine_threadsafe(self._close(), self._loop).result(START_S)
        self._loop.call_soon_threadsafe(self._loop.stop)
        self._thread.join(START_S)
        self._loop.close()

    @property
    def urls(self) -> list[str]:
        """Addresses of the servers behind the gates."""
        return [f"nats://127.0.0.1:{port}" for port in self.ports]

    def shut(self) -> None:
        """From now on nothing passes."""
        self._loop.call_soon_threadsafe(self._passing.clear)

    def open(self) -> None:
        """What waited passes, and all else."""
        self._loop.call_soon_threadsafe(self._passing.set)

    # ---- on the loop ------------------------------------------------------------------------------------------------

    async def _listen(self) -> None:
        for target in self._targets:

            def accept(reader: asyncio.StreamReader, writer: asyncio.StreamWriter, target: int = target) -> None:
                task = self._loop.create_task(self._connection(reader, writer, target))
                self._tasks.add(task)
                task.add_done_callback(self._tasks.discard)

            server = await asyncio.start_server(accept, "127.0.0.1", 0)
            self._servers.append(server)
            self.ports.append(server.sockets[0].getsockname()[1])

    async def _close(self) -> None:
        for server in self._servers:
            server.close()
        tasks = list(self._tasks)
        for task in tasks:
            task.cancel()
        await asyncio.gather(*tasks, return_exceptions=True)

    async def _connection(self, reader: asyncio.StreamReader, writer: asyncio.StreamWriter, target: int) -> None:
        other: asyncio.StreamWriter | None = None
        try:
            await self._passing.wait()
            answers, other = await asyncio.open_connection("127.0.0.1", target)
            await first_of(self._pass(reader, other), self._pass(answers, writer))
        except OSError:
            pass  # the server is away: the client's connection ends too
        finally:
            for each in (writer, *([other] if other else [])):
                each.close()
                with contextlib.suppress(OSError):
                    await each.wait_closed()

    async def _pass(self, reader: asyncio.StreamReader, writer: asyncio.StreamWriter) -> None:
        while chunk := await reader.read(CHUNK_BYTES):
            await self._passing.wait()
            writer.write(chunk)
            await writer.drain()
