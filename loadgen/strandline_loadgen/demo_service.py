"""A real service as a child process, for the demonstration: start, look, drain, stop. Reads its published HTTP only.

The child gets a temporary folder, a free port of the loopback address and one feed with a SQLite sink.
"""

from __future__ import annotations

import asyncio
import socket
import subprocess
import sys
from pathlib import Path
from typing import Any

import aiohttp
import msgspec

from .demo_story import Pace

FEED = "river-gauges"
READY_S_AT_MOST = 20.0
STOP_S_AT_MOST = 30.0
LOOK_S_AT_MOST = 2.0
EMPTY_S_AT_MOST = 20.0
POLL_S = 0.1
LOG_BYTES_SHOWN = 2000


class ServiceTrouble(Exception):
    """The service did not start, answer or stop; the text says what it wrote last."""


def configuration(port: int, folder: Path, pace: Pace) -> str:
    """The service's configuration file."""
    return f"""listen = "127.0.0.1:{port}"
data_dir = "{folder.as_posix()}/data"
[[feed]]
name = "{FEED}"
time = {{ at = "/observed_at", unit = "rfc3339" }}
source = "/station"
slack = "{_ms(pace.slack_s)}"
idle_after = "{_ms(pace.idle_after_s)}"
hold_at_most = "{_ms(pace.hold_at_most_s)}"
ahead_limit = "{_ms(pace.ahead_limit_s)}"
[[feed.sink]]
kind = "sqlite"
path = "{store_in(folder).as_posix()}"
"""


def store_in(folder: Path) -> Path:
    """Where the SQLite sink of a service in this folder writes."""
    return folder / "river.db"


def _ms(seconds: float) -> str:
    return f"{round(seconds * 1000)}ms"


def free_port() -> int:
    """A port of the loopback address that nobody listens on now."""
    with socket.socket() as probe:
        probe.bind(("127.0.0.1", 0))
        port: int = probe.getsockname()[1]
        return port


class ChildService:
    """The service's process. `async with` starts it, waits until it is ready, and stops it whatever happens."""

    def __init__(self, folder: Path, pace: Pace) -> None:
        self._folder, self._pace = folder, pace
        self._log = folder / "service.log"
        self._process: subprocess.Popen[bytes] | None = None
        self._session: aiohttp.ClientSession | None = None
        self.url = ""

    async def __aenter__(self) -> ChildService:
        port = free_port()
        self.url = f"http://127.0.0.1:{port}"
        file = self._folder / "strandline.toml"
        file.write_text(configuration(port, self._folder, self._pace))
        with self._log.open("wb") as log:
            self._process = subprocess.Popen(  # a session of its own: Ctrl-C reaches it through us, once
                [sys.executable, "-m", "strandline.cli", "serve", str(file)],
                stdin=subprocess.DEVNULL,
                stdout=log,
                stderr=log,
                start_new_session=True,
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

    async def look(self) -> dict[str, Any] | None:
        """What the service says of the feed; None while it does not answer."""
        return await self._get(f"/v1/feeds/{FEED}")

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

    async def drain(self) -> None:
        """Let go what is held, and wait until nothing is. Raises ServiceTrouble."""
        assert self._session is not None
        try:
            async with self._session.post(f"{self.url}/v1/feeds/{FEED}/drain") as answer:
                if answer.status >= 400:
                    raise ServiceTrouble(f"the drain was refused: {answer.status} {await answer.text()}")
            async with asyncio.timeout(EMPTY_S_AT_MOST):
                while (await self.look() or {}).get("ledger", {}).get("buffered") != 0:
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
