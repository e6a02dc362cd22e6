"""Services of a cluster on one real broker, in this process or as processes, with a store that needs nothing else.

What partitions hold and how they are taken over is judged with `helpers_cluster`; here are those who only look at it.
"""

from __future__ import annotations

import asyncio
import json
import time
from collections.abc import AsyncIterator, Sequence
from contextlib import asynccontextmanager, suppress
from pathlib import Path
from typing import Any

from helpers_brokers import STREAM, Nats
from helpers_service import FEED, Running, configuration, event_line

SUBJECT = "part.{}.gw"


def member(folder: Path, url: str, number: int, *, partitions: int, lease: str = "2s", **keys: object) -> str:
    """The configuration of instance `strandline-NUMBER`; it makes the instance's folder."""
    own = folder / f"strandline-{number}"
    own.mkdir(exist_ok=True)
    chosen = {"name": "river", "instance": own.name, "urls": [url], "replicas": 1, "lease": lease}
    cluster = "\n".join(["[cluster]", *(f"{key} = {json.dumps(value)}" for key, value in chosen.items())])
    stream = f'stream = "{STREAM}", subject = "part.{{partition}}.>", count = {partitions}'
    return configuration(own, top=cluster, more=f"partitions = {{ {stream} }}", **keys)


async def make_parted_stream(server: Nats) -> None:
    """The stream that the partitions are read from."""
    await server.make_stream(subject="part.>")


async def publish_to(server: Nats, partition: int, seconds: Sequence[float]) -> None:
    """Events of one gateway at these seconds, each a message."""
    lines = [event_line(second, f"gw-{partition}") + b"\n" for second in seconds]
    await server.publish(lines, subject=SUBJECT.format(partition))


@asynccontextmanager
async def gateways(server: Nats, partitions: int, every_s: float = 0.2) -> AsyncIterator[None]:
    """Three gateways for each partition that send what is observed now, until the block ends."""
    client = await server.client()

    async def send() -> None:
        stream = client.jetstream()
        while True:
            now = time.time()
            for partition in range(partitions):
                rows = [_observed(now - 0.05 * number, f"gw-{partition}-{number}") for number in range(3)]
                await stream.publish(SUBJECT.format(partition), "\n".join(rows).encode())
            await asyncio.sleep(every_s)  # the rate of a feed, not a wait

    task = asyncio.create_task(send())
    try:
        yield
        assert not task.done(), task
    finally:
        task.cancel()
        with suppress(asyncio.CancelledError):
            await task
        await client.close()


def _observed(at_s: float, station: str) -> str:
    whole, milli = divmod(round(at_s * 1000), 1000)
    moment = f"{time.strftime('%Y-%m-%dT%H:%M:%S', time.gmtime(whole))}.{milli:03d}Z"
    return json.dumps({"observed_at": moment, "station": station, "level": 4.2})


def at_work(*services: Running) -> list[set[int]]:
    """The numbers of the partitions that are at work at each."""
    return [{int(name.removeprefix(f"{FEED}-")) for name in each.service.feeds} for each in services]


async def cluster_of(service: Running) -> Any:
    """GET /v1/cluster."""
    answer = await service.get("/v1/cluster")
    assert answer.status == 200, answer.content
    return answer.json
