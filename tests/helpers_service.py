"""A running service for tests: in this process on the test's own loop, or as a real process that can be killed.

Starting, asking and ending only; what must come of it is the tests' business. Nothing here waits by guessing: what is
waited for is asked for again and again until a deadline, which is long because it decides nothing.
"""

from __future__ import annotations

import asyncio
import json
import os
import re
import select
import signal
import sqlite3
import subprocess
import sys
import time
import urllib.error
import urllib.request
from collections.abc import AsyncIterator, Callable, Iterable, Mapping
from contextlib import asynccontextmanager, closing
from dataclasses import dataclass
from pathlib import Path
from types import TracebackType
from typing import Any, Self

import aiohttp
from strandline.app import Service
from strandline.config import Config, parse
from strandline.runtime import FeedRuntime

FEED = "river-gauges"
NDJSON = "application/x-ndjson"
PROBLEM = "application/problem+json"
DEADLINE_S = 30.0
POLL_S = 0.01
BEGIN_S = 1_700_000_000  # event times of tests are given in seconds after this


def configuration(folder: Path, *, sinks: str = "", top: str = "", more: str = "", **keys: object) -> str:
    """One feed, `river-gauges`, patient unless `keys` say otherwise; `sinks` and `more` are TOML behind its keys."""
    chosen: dict[str, object] = {
        "slack": "0s",
        "idle_after": "1h",
        "hold_at_most": "1h",
        "ahead_limit": "1h",
        **keys,
    }
    lines = [f"{key} = {json.dumps(value)}" for key, value in chosen.items()]
    return "\n".join(
        [
            'listen = "127.0.0.1:0"',
            f"data_dir = {json.dumps(str(folder / 'data'))}",
            'drain_at_most = "20s"',
            top,
            "[[feed]]",
            f'name = "{FEED}"',
            'time = { at = "/observed_at", unit = "rfc3339" }',
            'source = "/station"',
            *lines,
            more,
            sinks or f'[[feed.sink]]\nkind = "sqlite"\npath = {json.dumps(str(store_in(folder)))}',
            "",
        ]
    )


def small_journal(folder: Path, at_most: str, **keys: object) -> str:
    """A feed whose journal has segments of 64 KiB, the smallest there are."""
    limits = dict.fromkeys(("decoded_bytes_at_most", "body_bytes_at_most", "event_bytes_at_most"), "64KiB")
    more = f'journal = {{ segment_bytes = "64KiB", at_most = "{at_most}" }}'
    return configuration(folder, more=more, **{**limits, **keys})  # type: ignore[arg-type]


def store_in(folder: Path) -> Path:
    """Where the SQLite sink of `configuration` writes."""
    return folder / "river.db"


def stored(folder: Path, lane: str = "events") -> list[int]:
    """Seconds of the events in the store, in its order; the late ones (`late`) as they came."""
    order = "batch, position" if lane == "events" else "rowid"
    with closing(sqlite3.connect(store_in(folder))) as connection:
        rows = connection.execute(f"SELECT time_ns FROM {lane} WHERE feed = ? ORDER BY {order}", (FEED,)).fetchall()
    return [time_ns // 10**9 - BEGIN_S for (time_ns,) in rows]


def config_of(text: str) -> Config:
    """The configuration that a text gives, without the environment."""
    return parse(text, {})


def event_line(second: float, station: str = "gw-1", **more: object) -> bytes:
    """One event as a line without a line feed; `second` counts from BEGIN_S."""
    whole, micro = divmod(round((BEGIN_S + second) * 1_000_000), 1_000_000)
    moment = time.strftime("%Y-%m-%dT%H:%M:%S", time.gmtime(whole)) + f".{micro:06d}Z"
    return json.dumps({"observed_at": moment, "station": station, **more}, separators=(",", ":")).encode()


def body_of(*lines: bytes) -> bytes:
    """Lines as a body."""
    return b"".join(line + b"\n" for line in lines)


def events(seconds: Iterable[float], station: str = "gw-1") -> bytes:
    """A body with one event for each second."""
    return body_of(*(event_line(second, station) for second in seconds))


async def eventually(true: Callable[[], bool], what: str = "") -> None:
    """Let the loop turn until it is true; fails after a deadline."""
    deadline = time.monotonic() + DEADLINE_S
    while not true():
        assert time.monotonic() < deadline, f"did not come true: {what or true}"
        await asyncio.sleep(POLL_S)


@dataclass(frozen=True, slots=True)
class Answer:
    """An answer over HTTP, read whole."""

    status: int
    headers: Mapping[str, str]
    content: bytes

    @property
    def json(self) -> Any:
        """The content, which must be what its media type says."""
        assert self.headers["Content-Type"].split(";")[0] in ("application/json", PROBLEM)
        return json.loads(self.content)


def problem_of(answer: Answer, status: int, kind: str = "about:blank") -> str:
    """Assert that it is this problem (RFC 9457 sections 3 and 3.1: media type, members, status as sent); its detail."""
    found = answer.json
    assert (answer.status, answer.headers["Content-Type"]) == (status, PROBLEM), found
    assert found["status"] == status
    assert found["type"] == (kind if kind == "about:blank" else f"urn:strandline:problem:{kind}")
    assert found["title"] and found["detail"]
    return str(found["detail"])


def retry_after(answer: Answer) -> int:
    """RFC 9110 section 10.2.3: delay-seconds = 1*DIGIT."""
    text = answer.headers["Retry-After"]
    assert text.isascii() and text.isdigit()
    return int(text)


@dataclass(slots=True)
class Running:
    """A service in this process, and a client for it."""

    service: Service
    session: aiohttp.ClientSession

    @property
    def url(self) -> str:
        return f"http://{self.service.address}"

    @property
    def runtime(self) -> FeedRuntime:
        """The feed of `configuration`."""
        return self.service.feeds[FEED]

    @property
    def feed_url(self) -> str:
        return f"{self.url}/v1/feeds/{FEED}"

    async def ask(self, method: str, path: str, **given: Any) -> Answer:
        """One request; `path` from /v1 on, or `events`, `marks`, ... of the feed."""
        url = self.url + path if path.startswith("/") else f"{self.feed_url}/{path}".rstrip("/")
        async with self.session.request(method, url, **given) as answer:
            return Answer(answer.status, answer.headers, await answer.read())

    async def get(self, path: str, **given: Any) -> Answer:
        return await self.ask("GET", path, **given)

    async def post(self, path: str, body: Any = None, **given: Any) -> Answer:
        """A body of bytes goes as NDJSON, anything else as JSON."""
        if body is None:
            return await self.ask("POST", path, **given)
        if not isinstance(body, bytes) and not hasattr(body, "__aiter__"):
            body, kind = json.dumps(body).encode(), "application/json"
        else:
            kind = NDJSON
        headers = {"Content-Type": kind, **given.pop("headers", {})}
        return await self.ask("POST", path, data=body, headers=headers, **given)

    async def send(self, seconds: Iterable[float], station: str = "gw-1") -> Any:
        """Events at these seconds, which must be answered with success; the answer's counts."""
        answer = await self.post("events", events(seconds, station))
        assert answer.status == 200, answer.content
        return answer.json

    async def document(self) -> Any:
        """The feed as GET shows it."""
        answer = await self.get("")
        assert answer.status == 200
        return answer.json


@asynccontextmanager
async def running(text: str, **seams: Any) -> AsyncIterator[Running]:
    """A service with this configuration on the test's loop; stopped at the end unless the test did. See `Service`."""
    service = Service(config_of(text), **seams)
    await service.start()
    try:
        async with aiohttp.ClientSession(timeout=aiohttp.ClientTimeout(total=DEADLINE_S)) as session:
            yield Running(service, session)
    finally:
        await service.stop()


class Process:
    """`strandline serve` as a process of its own, which can be ended in every way and started again.

    `url` is where it listens now: port 0 is configured, and each start says on stdout which port it got. What it wrote
    is shown when the block ends with an error.
    """

    scheme = "http"

    def __init__(self, folder: Path, text: str, environ: Mapping[str, str] | None = None) -> None:
        self.folder, self.file, self.log = folder, folder / "strandline.toml", folder / "service.log"
        self.file.write_text(text)
        self._environ = {name: value for name, value in os.environ.items() if not name.startswith("STRANDLINE_")}
        self._environ |= dict(environ or {})
        self.process: subprocess.Popen[bytes] | None = None
        self.url = ""

    def __enter__(self) -> Self:
        try:
            self.start()
        except BaseException as error:
            self.__exit__(type(error), error, None)
            raise
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        if self.process is not None and self.process.returncode is None:
            self._signal(signal.SIGKILL)
            self.wait()
        if error is not None:
            print(f"--- {self.log} ---\n{self.log.read_text(errors='replace')}")

    # ---- start and end ----------------------------------------------------------------------------------------------

    def begin(self) -> subprocess.Popen[bytes]:
        """Start it and wait for nothing."""
        with self.log.open("ab") as log:
            self.process = subprocess.Popen(
                [sys.executable, "-m", "strandline.cli", "serve", str(self.file)],
                stdin=subprocess.DEVNULL,
                stdout=subprocess.PIPE,
                stderr=log,
                env=self._environ,
                cwd=self.folder,
            )
        return self.process

    def start(self) -> None:
        """Start it and wait until it is ready."""
        self.begin()
        self.url = self.listens()
        self.until(lambda: self.status("/health/ready") == 200, "it is not ready")

    def listens(self) -> str:
        """Wait until it listens; the address, which it tells on stdout."""
        assert self.process is not None and self.process.stdout is not None
        told, _, _ = select.select([self.process.stdout], [], [], DEADLINE_S)
        line = self.process.stdout.readline().decode() if told else ""
        found = re.fullmatch(rf"listening on ({self.scheme}://127\.0\.0\.1:[0-9]+)\n", line)
        assert found, f"it did not say where it listens, but {line!r}"
        return found[1]

    def kill(self) -> None:
        """SIGKILL: nothing in it runs any more."""
        self._signal(signal.SIGKILL)
        assert self.wait() == -signal.SIGKILL

    def terminate(self) -> int:
        """SIGTERM; its exit code."""
        self._signal(signal.SIGTERM)
        return self.wait()

    def _signal(self, number: int) -> None:
        assert self.process is not None
        self.process.send_signal(number)

    def wait(self) -> int:
        """Its exit code, once it has ended."""
        assert self.process is not None and self.process.stdout is not None
        code = self.process.wait(DEADLINE_S)
        self.process.stdout.close()
        return code

    def run(self, *arguments: str) -> int:
        """Another command of `strandline`, with this configuration, while the service runs; its exit code."""
        command = [sys.executable, "-m", "strandline.cli", *arguments, "--config", str(self.file)]
        with self.log.open("ab") as log:
            return subprocess.run(command, stdout=log, stderr=log, env=self._environ, check=False).returncode

    # ---- asking -----------------------------------------------------------------------------------------------------

    def ask(self, path: str, body: bytes | None = None, headers: Mapping[str, str] | None = None) -> Answer:
        """One request on a connection of its own, POST where it has a body. Raises OSError while nothing answers."""
        given = {**({} if body is None else {"Content-Type": NDJSON}), **(headers or {})}
        request = urllib.request.Request(f"{self.url}{path}", data=body, headers=given)
        try:
            with urllib.request.urlopen(request, timeout=DEADLINE_S) as answer:
                return Answer(answer.status, dict(answer.headers), answer.read())
        except urllib.error.HTTPError as error:
            with error:
                return Answer(error.code, dict(error.headers), error.read())

    def status(self, path: str) -> int:
        """The status of an answer; 0 while nothing answers."""
        try:
            return self.ask(path).status
        except OSError:
            return 0

    def document(self) -> Any:
        """The feed as GET shows it."""
        return self.ask(f"/v1/feeds/{FEED}").json

    def drain(self) -> None:
        """Release all that is held, and wait until every sink has taken it."""
        assert self.ask(f"/v1/feeds/{FEED}/drain", b"").status == 204
        self.until(self.delivered, "not everything was delivered")

    def delivered(self) -> bool:
        """Whether nothing is held and nothing waits for a sink."""
        found = self.document()
        lanes = [lane for sink in found["sinks"].values() for lane in sink["lanes"].values()]
        waits = found["ledger"]["buffered"] or found["hops"]["release"]["waiting"]
        return not waits and not any(lane["waiting_batches"] for lane in lanes)

    def until(self, true: Callable[[], bool], what: str) -> None:
        """Ask until it is true; fails at once when the process ends, and after a deadline."""
        deadline = time.monotonic() + DEADLINE_S
        while not true():
            assert self.process is not None and self.process.poll() is None, f"the process has ended: {what}"
            assert time.monotonic() < deadline, what
            time.sleep(POLL_S)
