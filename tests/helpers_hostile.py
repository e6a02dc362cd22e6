"""A real process for hostile input: asked for its health beside every body, and measured afterwards."""

from __future__ import annotations

import asyncio
import json
import re
import threading
import time
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

from helpers_raw import LAST, Reply, exchange, post, replies
from helpers_service import FEED, NDJSON, Answer, Process

MIB = 2**20
# What the process may take beside what it takes when it has just started, once a test is over and at its worst: a body
# at its limits as it came, decoded, as lines and as records; with what the allocator keeps (measured: 190 and 320 MiB).
RSS_MORE_AT_MOST, PEAK_MORE_AT_MOST = 400 * MIB, 800 * MIB
HEALTH_WITHIN_S = 2.0  # on a busy machine; measured: 0.1 to 0.8, the longest for 200,000 empty frames


class Target(Process):
    """The process, with what its memory was when it had started."""

    def start(self) -> None:
        super().start()
        self.rss_bytes = self.memory("VmRSS")

    def memory(self, name: str) -> int:
        assert self.process is not None
        status = Path(f"/proc/{self.process.pid}/status").read_text()
        found = re.search(rf"{name}:\s+(\d+) kB", status)
        assert found
        return int(found[1]) * 1024

    @property
    def address(self) -> tuple[str, int]:
        host, port = self.url.removeprefix("http://").split(":")
        return host, int(port)

    def send(self, *requests: bytes) -> list[Reply]:
        """Requests on one connection, and the answers to them."""
        found = replies(asyncio.run(exchange(*self.address, [b"".join(requests) + LAST])))
        assert json.loads(found[-1].content) == {"live": True}
        return found[:-1]

    def post(self, body: bytes, media_type: str = NDJSON, feed: str = FEED, **headers: str) -> Answer:
        """One body; meanwhile somebody asks for health, again and again."""
        with self.asked_for_health():
            path = f"/v1/feeds/{feed}/events"
            (reply,) = self.send(post(body, path, content_type=media_type, **headers))
        return Answer(reply.status, {name.title(): text for name, text in reply.headers.items()}, reply.content)

    @contextmanager
    def asked_for_health(self) -> Iterator[None]:
        over, longest = threading.Event(), 0.0

        def ask() -> None:
            nonlocal longest
            while not over.is_set():
                start = time.monotonic()
                assert self.status("/health/live") == 200
                longest = max(longest, time.monotonic() - start)

        asking = threading.Thread(target=ask)
        asking.start()
        try:
            yield
        finally:
            over.set()
            asking.join()
        now, most = ((self.memory(name) - self.rss_bytes) // MIB for name in ("VmRSS", "VmHWM"))
        print(f"longest wait for health {longest:.3f} s; {now} MiB more memory than at the start, {most} at its worst")
        assert longest < HEALTH_WITHIN_S, f"somebody waited {longest:.2f} s for the service's health"

    def is_well(self) -> None:
        assert self.status("/health/ready") == 200
        for document in self.ask("/v1/feeds").json["feeds"]:
            assert document["ledger"]["balanced"] is True
        log = self.log.read_text(errors="replace")
        assert not re.search("unforeseen|Traceback|CRITICAL|Task was destroyed", log), log[-3000:]
        assert self.memory("VmRSS") - self.rss_bytes < RSS_MORE_AT_MOST
        assert self.memory("VmHWM") - self.rss_bytes < PEAK_MORE_AT_MOST
