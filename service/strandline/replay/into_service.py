"""Replays into a running service: the captured requests, sent again at their pace. No decision is taken here.

The schedule is open: when a request is due is fixed beforehand, however long answers take; how far behind it the
sending fell is told. On one connection requests keep their order, as they came; with several, neighbours may swap.
"""

from __future__ import annotations

import asyncio
import time
from collections.abc import AsyncIterator, Callable, Iterator
from dataclasses import dataclass, field
from typing import Any

import aiohttp
import msgspec

from strandline.cli_answers import WRONG_USE
from strandline.client_access import Caller, detail_of, feed_address, refusal
from strandline.core.records import Kind
from strandline.errors import CaptureError, ConfigError
from strandline.ingest.formats import NDJSON

from .capture import Capture
from .lines import CapturedLines

ANSWER_WITHIN_S = 60.0
TRIES_AT_MOST = 50
RETRY_S_AT_MOST = 30.0
BUSY = (408, 429, 503)


@dataclass(slots=True)
class Sent:
    """What became of it. `behind_s_max`: how far the sending fell behind its schedule."""

    requests: int = 0
    events: int = 0
    seconds: float = 0.0
    retried: int = 0
    behind_s_max: float = 0.0
    unsendable: int = 0  # faulty lines that cannot be sent as they came, since they hold a line feed
    answers: dict[str, int] = field(default_factory=dict)

    def note(self, answer: dict[str, Any]) -> None:
        """Count one answer."""
        self.requests += 1
        for name in ("received", "accepted", "late", "duplicate", "quarantined"):
            self.answers[name] = self.answers.get(name, 0) + int(answer[name])


@dataclass(frozen=True, slots=True)
class _Body:
    """One request: seconds after the first one at which it is due (0 at full pace), its bytes, its events."""

    due_s: float
    content: bytes
    events: int


def send(
    capture: Capture,
    url: str,
    feed: str,
    *,
    speed: float | None,
    connections: int,
    progress: Callable[[int], object],
    caller: Caller = Caller(),  # noqa: B008 - frozen
) -> Sent:
    """Send every request of a capture to a feed. `speed`: so many times as fast as recorded; None: at full pace.

    Raises CaptureError where it was captured without events, or the service refuses a request for good or cannot be
    reached.
    """
    if not capture.meta.lines:
        raise CaptureError(f"{capture.path}: it was made --without-events: there is nothing to send")
    sent = Sent()
    sender = _Sender(feed_address(url, feed, "events"), sent, progress, caller)
    try:
        asyncio.run(sender.run(_bodies(capture, speed, sent), connections))
    except* (CaptureError, ConfigError) as errors:
        raise errors.exceptions[0] from None
    except* (aiohttp.ClientError, TimeoutError) as errors:
        raise CaptureError(f"{url} cannot be reached: {errors.exceptions[0] or 'no answer in time'}") from errors
    return sent


def _bodies(capture: Capture, speed: float | None, sent: Sent) -> Iterator[_Body]:
    lines = CapturedLines(capture, ())
    for block in capture.blocks():
        for record in block.records():
            if record.kind != Kind.ARRIVAL:
                continue
            number = record.request
            size, raws = int(block.payload_bytes[number]), int(block.raw_bytes[number])
            content = lines.payload(int(block.first_line[number]), size + raws)
            body, place = [content[:size]], size
            for row in block.faults(number):
                raw = content[place : place + row.length]
                place += row.length
                if b"\n" in bytes(raw):
                    sent.unsendable += 1
                else:
                    body += [raw, memoryview(b"\n")]
            due_s = (int(block.arrived[number]) - capture.first_ns) / 1e9 / speed if speed else 0.0
            yield _Body(due_s, b"".join(body), int(block.counts[number]) + len(block.faults(number)))


class _Sender:
    """Keeps to the schedule on some connections."""

    def __init__(self, url: str, sent: Sent, progress: Callable[[int], object], caller: Caller) -> None:
        self._url, self._sent, self._progress, self._caller = url, sent, progress, caller
        self._begin = 0.0

    async def run(self, bodies: Iterator[_Body], connections: int) -> None:
        """Send all of them. The first error ends it."""
        self._begin = time.monotonic()
        timeout = aiohttp.ClientTimeout(total=ANSWER_WITHIN_S)
        connector = aiohttp.TCPConnector(limit=connections, ssl=self._caller.context or True)
        queue = self._due(bodies)
        headers = self._caller.headers
        async with aiohttp.ClientSession(timeout=timeout, connector=connector, headers=headers) as session:
            turn = asyncio.Lock()
            async with asyncio.TaskGroup() as group:
                for _ in range(connections):
                    group.create_task(self._work(session, queue, turn))
        self._sent.seconds = time.monotonic() - self._begin

    async def _due(self, bodies: Iterator[_Body]) -> AsyncIterator[_Body]:
        for body in bodies:
            wait_s = self._begin + body.due_s - time.monotonic()
            if wait_s > 0:
                await asyncio.sleep(wait_s)
            elif body.due_s:
                self._sent.behind_s_max = max(self._sent.behind_s_max, -wait_s)
            yield body

    async def _work(self, session: aiohttp.ClientSession, queue: AsyncIterator[_Body], turn: asyncio.Lock) -> None:
        while True:
            async with turn:
                body = await anext(queue, None)
            if body is None:
                return
            self._sent.note(await self._post(session, body))
            self._sent.events += body.events
            self._progress(self._sent.events)

    async def _post(self, session: aiohttp.ClientSession, body: _Body) -> dict[str, Any]:
        for _ in range(TRIES_AT_MOST):
            async with session.post(self._url, data=body.content, headers={"Content-Type": NDJSON}) as answer:
                content = await answer.read()
                if answer.status == 200:
                    found: dict[str, Any] = msgspec.json.decode(content)
                    return found
                if answer.status not in BUSY:
                    code, why = refusal(answer.status, _detail(content), self._caller)
                    told = f"{self._url} answered {answer.status}: {why}"
                    raise ConfigError([told]) if code == WRONG_USE else CaptureError(told)
                self._sent.retried += 1
                wait = answer.headers.get("Retry-After", "1")
            await asyncio.sleep(min(float(wait) if wait.isdecimal() else 1.0, RETRY_S_AT_MOST))
        raise CaptureError(f"{self._url} refused a request {TRIES_AT_MOST} times, the last time: {_detail(content)}")


def _detail(content: bytes) -> str:
    return detail_of(content) or content[:200].decode(errors="replace")
