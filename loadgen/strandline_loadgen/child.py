"""A server as a child process, for the demonstration and the benchmark: start, look, drain, stop.

The child listens at a free port of the loopback address; of the service only published HTTP is used.
"""

from __future__ import annotations

import asyncio
import socket
import subprocess
import sys
from collections.abc import Sequence
from pathlib import Path
from typing import Any

import aiohttp
import msgspec

READY_S_AT_MOST = 20.0
STOP_S_AT_MOST = 60.0
LOOK_S_AT_MOST = 5.0
EMPTY_S_AT_MOST = 120.0
POLL_S = 0.1
LOG_BYTES_SHOWN = 2000


class ServiceTrouble(Exception):
    """The service did not start, answer or stop; the text says what it wrote last."""


def free_port() -> int:
    """A port of the loopback address that nobody listens on now."""
    with socket.socket() as probe:
        probe.bind(("127.0.0.1", 0))
        port: int = probe.getsockname()[1]
        return port


def serve(file: Path) -> list[str]:
    """The command that runs the service with this configuration."""
    return [sys.executable, "-m", "strandline.cli", "serve", str(file)]


class ChildServer:
    """A server's process. `async with` starts it, waits until it is ready, and ends it whatever happens."""

    def __init__(self, command: Sequence[str], port: int, log: Path) -> None:
        self._command, self._log = command, log
        self._process: subprocess.Popen[bytes] | None = None
        self._session: aiohttp.ClientSession | None = None
        self.url = f"http://127.0.0.1:{port}"

    async def __aenter__(self) -> ChildServer:
        with self._log.open("wb") as log:
            self._process = subprocess.Popen(  # a session of its own: Ctrl-C reaches it through us, once
                self._command, stdin=subprocess.DEVNULL, stdout=log, stderr=log, start_new_session=True
            )
        self._session = aiohttp.ClientSession(timeout=aiohttp.ClientTimeout(total=LOOK_S_AT_MOST))
        try:
            await self._until_ready()
        except BaseException:
            await self.__aexit__()
            raise
        return self

    async def __aexit__(self, *_: object) -> None:
        if self._session:
            await self._session.close()
        if self._process and self._process.poll() is None:
            self._process.kill()
            await asyncio.to_thread(self._process.wait)

    async def _until_ready(self) -> None:
        async def ask() -> None:
            while await self._get("/health/ready") is None:
                if self._process is None or self._process.poll() is not None:
                    raise ServiceTrouble(f"the service did not start:\n{self.last_words()}")
                await asyncio.sleep(POLL_S)

        try:
            await asyncio.wait_for(ask(), READY_S_AT_MOST)
        except TimeoutError:
            raise ServiceTrouble(f"the service was not ready in {READY_S_AT_MOST:g} s:\n{self.last_words()}") from None

    @property
    def process_id(self) -> int:
        """Of the child, while it runs."""
        assert self._process is not None
        return self._process.pid

    async def look(self, feed: str) -> dict[str, Any] | None:
        """What the service says of the feed; None while it does not answer."""
        return await self._get(f"/v1/feeds/{feed}")

    async def has_dashboard(self) -> bool:
        """Does the service show itself to a browser?"""
        assert self._session is not None
        try:
            async with self._session.get(self.url + "/") as answer:
                return answer.status == 200
        except (aiohttp.ClientError, TimeoutError):
            return False

    async def _get(self, path: str) -> dict[str, Any] | None:
        assert self._session is not None
        try:
            async with self._session.get(self.url + path) as answer:
                content = await answer.read()
            found = msgspec.json.decode(content) if answer.status == 200 else None
        except (aiohttp.ClientError, TimeoutError, msgspec.MsgspecError):
            return None
        return found if isinstance(found, dict) else None

    async def drain(self, feed: str) -> None:
        """Let go what is held, and wait until nothing is. Raises ServiceTrouble."""
        assert self._session is not None
        try:
            async with self._session.post(f"{self.url}/v1/feeds/{feed}/drain") as answer:
                if answer.status >= 400:
                    raise ServiceTrouble(f"the drain was refused: {answer.status} {await answer.text()}")
            async with asyncio.timeout(EMPTY_S_AT_MOST):
                while (await self.look(feed) or {}).get("ledger", {}).get("buffered") != 0:
                    await asyncio.sleep(POLL_S)
        except (aiohttp.ClientError, TimeoutError) as error:
            raise ServiceTrouble(f"the feed could not be drained ({error}):\n{self.last_words()}") from error

    async def stop(self) -> int:
        """End it the way an operator would (SIGTERM); its exit code. Raises ServiceTrouble when it does not end."""
        assert self._process is not None
        self._process.terminate()
        try:
            return await asyncio.to_thread(self._process.wait, STOP_S_AT_MOST)
        except subprocess.TimeoutExpired:
            raise ServiceTrouble(f"the service did not stop in {STOP_S_AT_MOST:g} s:\n{self.last_words()}") from None

    def last_words(self) -> str:
        """The end of what the service wrote."""
        return self._log.read_bytes()[-LOG_BYTES_SHOWN:].decode(errors="replace").strip() or "(it wrote nothing)"
