"""Partitions for tests, without leases: instances' ground, owners that follow one another, messages for the stream.

The broker is `helpers_brokers.Nats`. Nothing is judged here.
"""

from __future__ import annotations

import asyncio
import contextlib
import json
import time
from collections.abc import AsyncIterator, Awaitable, Callable, Iterable
from pathlib import Path
from typing import Any

from helpers_brokers import Nats
from helpers_service import DEADLINE_S, POLL_S
from strandline.broker_access import BrokerAccess
from strandline.clock import SystemClock
from strandline.cluster.link import Link
from strandline.cluster.partition import Ground, Part, Partition
from strandline.config import Config, parse
from strandline.ingest.offload import Aside
from strandline.runtime import FeedRuntime
from strandline.sinks import make_shared_sink

RIVER, SUBJECT = "RIVER", "part.0.gauge"
FEED = "gauges"
TIME = 'time = { at = "/t", unit = "ns" }'
TICK_S = 0.05


@contextlib.asynccontextmanager
async def linked(server: Nats, *names: str) -> AsyncIterator[list[Link]]:
    """Connections of so many owners."""
    links = [Link([server.url], BrokerAccess(), name) for name in names]
    try:
        yield links
    finally:
        for link in links:
            await link.close()


async def until(true: Callable[[], bool] | Callable[[], Awaitable[bool]], what: str) -> None:
    """Wait until it is so."""
    deadline = time.monotonic() + DEADLINE_S
    while True:
        found = true()
        if found if isinstance(found, bool) else await found:
            return
        assert time.monotonic() < deadline, f"in vain: {what}"
        await asyncio.sleep(POLL_S)


async def make_river(server: Nats, **more: Any) -> None:
    """The stream that producers publish to."""
    await server.make_stream(RIVER, "part.>", **more)


async def publish(server: Nats, bodies: Iterable[bytes]) -> None:
    """Messages for partition 0, one after the other."""
    await server.publish(bodies, subject=SUBJECT)


def line(number: int, time_ns: int, source: str, **more: object) -> bytes:
    """One event."""
    return json.dumps({"t": time_ns, "s": source, "n": number, **more}).encode() + b"\n"


def configured(folder: Path, server: Nats, instance: str, *, feed: str = "", top: str = "", sink: str = "") -> Config:
    """What an instance's file says; `feed`, `top` and `sink` are further lines."""
    text = f"""
data_dir = "{folder / instance}"
[cluster]
name = "river"
instance = "{instance}"
urls = ["{server.url}"]
replicas = 1
{top}
[[feed]]
name = "{FEED}"
{"" if "time =" in feed else TIME}
partitions = {{ stream = "{RIVER}", subject = "part.{{partition}}.>", count = 2 }}
{feed}
{sink or f'[[feed.sink]]{chr(10)}kind = "sqlite"{chr(10)}path = "{folder / "store.db"}"'}
"""
    return parse(text, {})


class Instance:
    """What one instance has: a folder, feeds at work, a tick. `with` begins and ends the tick."""

    def __init__(self, folder: Path, server: Nats, name: str, **lines: str) -> None:
        config = configured(folder, server, name, **lines)
        assert config.cluster is not None
        (self.feed,) = config.feeds
        self.aside, self.owned = Aside(), list[Partition]()
        self.ground = Ground(config.cluster, config.data_dir, SystemClock(), make_shared_sink, self.aside, {}, 5.0)
        self.data_dir: Path = config.data_dir
        self._ticking: asyncio.Task[None] | None = None

    def part(self, fence: int) -> Part:
        """Partition 0, to be owned under this fence."""
        return Part(self.feed, self.feed.partition_feeds()[0], 0, fence)

    async def own(self, fence: int) -> Partition:
        """Take it over."""
        partition = await Partition.take_over(self.ground, self.part(fence))
        self.owned.append(partition)
        return partition

    @property
    def runtime(self) -> FeedRuntime:
        """The partition's feed at work."""
        return self.ground.feeds[f"{FEED}-0"]

    async def __aenter__(self) -> Instance:
        self._ticking = asyncio.create_task(self._tick())
        return self

    async def __aexit__(self, *of: object) -> None:
        assert self._ticking is not None
        self._ticking.cancel()
        with contextlib.suppress(asyncio.CancelledError):
            await self._ticking
        for partition in self.owned:
            await partition.stop(drain=False)
        self.aside.close()

    async def _tick(self) -> None:
        while True:
            for runtime in list(self.ground.feeds.values()):
                runtime.tick()
            await asyncio.sleep(TICK_S)
