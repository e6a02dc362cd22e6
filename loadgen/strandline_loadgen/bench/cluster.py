"""Rows on one partition of a cluster: what its replicated log costs, and how long another instance needs to take over.

The yardstick of the first is the same service taking the same messages by an intake, with a journal on this machine's
disk that is synced. The partition syncs nothing here; it waits for the log's answer instead. With three servers on this
one machine their work takes the cores from what is measured, so that row tells the price at its highest.

A takeover is measured from the lease to a partition at work, while all events are held: the log is read, the messages
are read again from the stream, the journal is made and folded. The files are judged at the end.
"""

from __future__ import annotations

import asyncio
import contextlib
import signal
import tempfile
import time
from collections.abc import AsyncIterator, Callable, Coroutine
from contextlib import asynccontextmanager
from functools import partial
from importlib.util import find_spec
from pathlib import Path
from typing import TYPE_CHECKING, Any

import uvloop
from strandline.broker_access import BrokerAccess
from strandline.clock import SystemClock
from strandline.config import Config, parse
from strandline.errors import StrandlineError
from strandline.ingest.offload import Aside
from strandline.runtime import FeedRuntime
from strandline.sinks import make_shared_sink

from strandline_loadgen.child import free_port
from strandline_loadgen.evidence import Sent

from .brokers import BODY_EVENTS, FETCH, STREAM, nats_server, publish, served, service_s
from .harness import Measure, Row, Sample, Scale
from .service import PATIENT_FEED, TO_FILES, Course, check_files, course_of

if TYPE_CHECKING:
    from strandline.cluster.partition import Partition

HELD = (100_000, 1_000_000)
BROKERS = 3
PARTITION = "bench-0"
UP_WITHIN_S, DONE_WITHIN_S, DRAIN_S = 30.0, 300.0, 300.0
Visit = Callable[[Course, str], Coroutine[Any, Any, Sample]]
HEAD = """data_dir = "{folder}/data"
drain_at_most = "5m"
[cluster]
name = "bench"
instance = "{instance}"
urls = [{urls}]
replicas = {replicas}
"""
CONFIGURATION = HEAD + PATIENT_FEED + TO_FILES
PARTITIONS = (
    f'partitions = {{ stream = "{STREAM}", subject = "bench.{{partition}}.events", count = 1, '
    f"fetch_at_most = {FETCH} }}"
)


@asynccontextmanager
async def three_served(program: str, folder: Path) -> AsyncIterator[list[str]]:
    """Three servers that replicate for one another, on this machine; their addresses."""
    ports = [(free_port(), free_port()) for _ in range(BROKERS)]
    routes = ", ".join(f"nats://127.0.0.1:{route}" for _, route in ports)
    processes = []
    try:
        for number, (port, route) in enumerate(ports):
            file = folder / f"broker-{number}.conf"
            file.write_text(
                f'server_name: broker-{number}\nlisten: "127.0.0.1:{port}"\n'
                f'jetstream {{ store_dir: "{folder}/broker-{number}" }}\n'
                f'cluster {{ name: bench, listen: "127.0.0.1:{route}", routes: [{routes}] }}\n'
            )
            with (folder / f"broker-{number}.log").open("wb") as log:
                command = (program, "--config", str(file))
                processes.append(await asyncio.create_subprocess_exec(*command, stdout=log, stderr=log))
        urls = [f"nats://127.0.0.1:{port}" for port, _ in ports]
        await _until_elected(urls)
        yield urls
    finally:
        for process in processes:
            process.send_signal(signal.SIGKILL)
            await process.wait()


async def _until_elected(urls: list[str]) -> None:
    from strandline.nats_client import NOT_THERE, connect, disconnect  # noqa: PLC0415 - an extra

    async with asyncio.timeout(UP_WITHIN_S):
        while True:
            with contextlib.suppress(StrandlineError):
                client = await connect(urls, BrokerAccess(), "strandline bench")
                try:
                    with contextlib.suppress(*NOT_THERE):
                        await client.jetstream(timeout=1.0).add_stream(name="PROBE", subjects=["probe"], num_replicas=3)
                        return
                finally:
                    await disconnect(client)
            await asyncio.sleep(0.1)


def configuration(urls: list[str], folder: Path, instance: str, slack: str, replicas: int) -> Config:
    """Of one instance. Each has its own data_dir; the files that it delivers to are the same."""
    text = CONFIGURATION.format(
        folder=folder.as_posix(), instance=instance, slack=slack, replicas=replicas, more=PARTITIONS,
        urls=", ".join(f'"{url}"' for url in urls),
    )  # fmt: skip
    return parse(text, {})


async def taken_over(config: Config, fence: int, feeds: dict[str, FeedRuntime]) -> Partition:
    """The only partition, in the hands of this process from now on."""
    from strandline.cluster.partition import Ground, Part, Partition  # noqa: PLC0415 - needs the broker's client

    assert config.cluster is not None
    data_dir = config.data_dir / config.cluster.instance
    ground = Ground(config.cluster, data_dir, SystemClock(), make_shared_sink, Aside(), feeds, DRAIN_S)
    (feed,) = config.feeds
    return await Partition.take_over(ground, Part(feed, feed.partition_feeds()[0], 0, fence))


async def partition_s(urls: list[str], course: Course, folder: Path, replicas: int) -> float:
    """Seconds in which a partition takes everything and has it in the log; what it delivered is judged."""
    feeds: dict[str, FeedRuntime] = {}
    partition = await taken_over(configuration(urls, folder, "one", course.slack, replicas), 1, feeds)
    try:
        begun = time.perf_counter()
        await _until_taken(feeds[PARTITION], course)
        seconds = time.perf_counter() - begun
        await feeds[PARTITION].act(feeds[PARTITION].feed.drain)
    finally:
        await partition.stop(drain=True)
    check_files(course, Sent.of(course.trace, course.bounds), folder, feed=PARTITION)
    return seconds


async def takeover_s(urls: list[str], course: Course, folder: Path) -> float:
    """Seconds in which another instance takes the partition over, with everything held, from one that just stops."""
    feeds: dict[str, FeedRuntime] = {}
    first = await taken_over(configuration(urls, folder, "one", "1h", 1), 1, feeds)
    try:
        await _until_taken(feeds[PARTITION], course)
    finally:
        await first.stop(drain=False)
    second = await taken_over(configuration(urls, folder, "two", "1h", 1), 2, feeds)
    try:
        if (held := feeds[PARTITION].view().held_events) != len(course.trace):
            raise RuntimeError(f"{held} of {len(course.trace)} events are held: no figure would mean anything")
        await feeds[PARTITION].act(feeds[PARTITION].feed.drain)
    finally:
        await second.stop(drain=True)
    check_files(course, Sent.of(course.trace, course.bounds), folder, feed=PARTITION)
    return second.took_s


async def _until_taken(runtime: FeedRuntime, course: Course) -> None:
    async with asyncio.timeout(DONE_WITHIN_S):
        while runtime.view().ledger["received"] < len(course.trace) or runtime.intakes[0].in_flight:
            await asyncio.sleep(0.001)


async def _published(urls: list[str], course: Course, replicas: int) -> None:
    import nats  # noqa: PLC0415 - an extra

    client = await nats.connect(servers=urls)
    try:
        await publish(client, course, replicas)
    finally:
        await client.close()


async def _against_an_intake(course: Course, program: str) -> Sample:
    events = len(course.trace)
    with tempfile.TemporaryDirectory(prefix="strandline-bench-") as name:
        async with served(program, Path(name)) as url:
            await _published([url], course, 1)
            intake = events / await service_s(url, course, Path(name) / "intake")
            partition = events / await partition_s([url], course, Path(name) / "partition", 1)
    return Sample(partition / intake, {"events/s": partition, "intake events/s": intake})


async def _on_three(course: Course, program: str) -> Sample:
    events = len(course.trace)
    with tempfile.TemporaryDirectory(prefix="strandline-bench-") as name:
        async with three_served(program, Path(name)) as urls:
            await _published(urls, course, BROKERS)
            partition = events / await partition_s(urls, course, Path(name) / "partition", BROKERS)
    return Sample(partition / 1e6, {"events/s": partition})


async def _takeover(course: Course, program: str) -> Sample:
    with tempfile.TemporaryDirectory(prefix="strandline-bench-") as name:
        async with served(program, Path(name)) as url:
            await _published([url], course, 1)
            seconds = await takeover_s([url], course, Path(name))
    return Sample(seconds, {"messages": float(len(course.bodies)), "events/s": len(course.trace) / seconds})


def _prepare(visit: Visit, program: str, events: int | None, scale: Scale) -> Measure:
    course = course_of(BODY_EVENTS, scale, events=events)

    def measure() -> Sample:
        return uvloop.run(visit(course, program))

    return measure


def rows(scale: Scale) -> list[Row]:
    """None where no server and no client is installed (the extra `test`)."""
    program = nats_server()
    if program is None or find_spec("nats") is None:
        return []
    what = f"messages of {BODY_EVENTS} events"
    found = [
        Row(f"a partition, {what}", "x", partial(_prepare, _against_an_intake, program, None), sense="at least"),
        Row(
            f"a partition with {BROKERS} brokers on this machine, {what}", "M/s",
            partial(_prepare, _on_three, program, None), sense="at least", warm=False,
        ),
    ]  # fmt: skip
    for held in HELD:
        if held <= scale.events:
            name = f"a partition taken over, {held:,} events held"
            make = partial(_prepare, _takeover, program, held)
            found.append(Row(name, "s", make, warm=False, rounds_at_most=3, place={"held": held}))
    return found
