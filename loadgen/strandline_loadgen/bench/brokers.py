"""Rows on taking from JetStream: the whole service against two bare loops of the client's own.

One server (of the extra `test`) holds the same messages of 500 events for all; each has a consumer of its own and runs
on this process's loop, one after the other. The first loop fetches and acknowledges; it looks at no message and keeps
nothing. The second does what any durable consumer must: it decodes the two members that a feed names, writes each
message with its CRC to a file, and acknowledges once that is synced, one sync for many. The service journals, orders
and delivers to NDJSON files besides, which the judge reads afterwards. The clock runs from the first fetch to the
acknowledgement of the last message. The server takes the machine's other core.
"""

from __future__ import annotations

import asyncio
import contextlib
import shutil
import signal
import sys
import tempfile
import time
from collections.abc import AsyncIterator
from contextlib import asynccontextmanager
from functools import partial
from importlib.util import find_spec
from pathlib import Path
from typing import TYPE_CHECKING

import msgspec
import uvloop
from strandline.app import Service
from strandline.config import parse

from strandline_loadgen.child import free_port
from strandline_loadgen.evidence import Sent

from .bare import RoundFile
from .harness import Also, Measure, Row, Sample, Scale
from .path import TwoMembers
from .service import CONFIGURATION, FEED, Course, check_files, course_of

if TYPE_CHECKING:
    from nats.aio.client import Client
    from nats.aio.msg import Msg

BODY_EVENTS = 500
GOAL = 0.7
DURABLE = "taking from JetStream, against a loop that decodes and syncs"
IN_FLIGHT = 256
STREAM, SUBJECT, FETCH = "BENCH", "bench.0.events", 100
PUBLISHED_AT_ONCE = 50
UP_WITHIN_S, DONE_WITHIN_S = 20.0, 300.0
INTAKE = """[[feed.intake]]
kind = "jetstream"
urls = ["{url}"]
stream = "BENCH"
fetch_at_most = {fetch}
"""


def nats_server() -> str | None:
    """The program: beside this interpreter, as the wheel puts it, or on the path."""
    beside = Path(sys.executable).parent / "nats-server"
    return str(beside) if beside.exists() else shutil.which("nats-server")


@asynccontextmanager
async def served(program: str, folder: Path) -> AsyncIterator[str]:
    """A server with a stream on disk; its address."""
    port, file = free_port(), folder / "nats.conf"
    file.write_text(f'listen: "127.0.0.1:{port}"\njetstream {{ store_dir: "{folder}/store" }}\n')
    with (folder / "nats.log").open("wb") as log:
        process = await asyncio.create_subprocess_exec(program, "--config", str(file), stdout=log, stderr=log)
    try:
        await _until_up(port)
        yield f"nats://127.0.0.1:{port}"
    finally:
        process.send_signal(signal.SIGKILL)
        await process.wait()


async def _until_up(port: int) -> None:
    async with asyncio.timeout(UP_WITHIN_S):
        while True:
            with contextlib.suppress(OSError):
                _, writer = await asyncio.open_connection("127.0.0.1", port)
                writer.close()
                return
            await asyncio.sleep(0.02)


async def publish(client: Client, course: Course, replicas: int = 1) -> None:
    """All bodies, in order, each a message."""
    stream = client.jetstream(timeout=30.0)
    await stream.add_stream(name=STREAM, subjects=[SUBJECT], num_replicas=replicas)
    for start in range(0, len(course.bodies), PUBLISHED_AT_ONCE):
        some = course.bodies[start : start + PUBLISHED_AT_ONCE]
        acknowledged = [await stream.publish_async(SUBJECT, body.payload) for body in some]
        await asyncio.gather(*acknowledged)


async def bare_s(client: Client, course: Course) -> float:
    """Seconds for fetching and acknowledging everything, as the client's own documents show it."""
    subscription = await client.jetstream().pull_subscribe(SUBJECT, "bare", STREAM)
    left, begun = len(course.bodies), time.perf_counter()
    while left:
        messages = await subscription.fetch(FETCH, timeout=5)
        for message in messages:
            await message.ack()
        left -= len(messages)
    await client.flush()
    return time.perf_counter() - begun


async def durable_s(client: Client, course: Course, folder: Path) -> float:
    """Seconds for the same with each message decoded and synced to a file before it is acknowledged."""
    subscription = await client.jetstream().pull_subscribe(SUBJECT, "durable", STREAM)
    journal, room = RoundFile(folder / "bare.journal"), asyncio.Semaphore(IN_FLIGHT)
    decode_lines = msgspec.json.Decoder(TwoMembers).decode_lines

    async def keep(message: Msg) -> None:
        try:
            decode_lines(message.data)
            await journal.append(message.data)
            await message.ack()
        finally:
            room.release()

    left, begun, tasks = len(course.bodies), time.perf_counter(), []
    while left:
        messages = await subscription.fetch(FETCH, timeout=5)
        left -= len(messages)
        for message in messages:
            await room.acquire()
            tasks.append(asyncio.create_task(keep(message)))
    await asyncio.gather(*tasks)
    await client.flush()
    return time.perf_counter() - begun


async def service_s(url: str, course: Course, folder: Path) -> float:
    """Seconds in which the service takes and acknowledges everything; what it delivered is judged."""
    more = INTAKE.format(url=url, fetch=FETCH)
    text = CONFIGURATION.format(port=0, folder=folder.as_posix(), more=more, slack=course.slack)
    service = Service(parse(text, {}))
    await service.start()
    try:
        (counts,) = service.feeds[FEED].intakes
        async with asyncio.timeout(DONE_WITHIN_S):
            while not counts.connected:
                await asyncio.sleep(0)
            begun = time.perf_counter()
            while counts.outcomes["taken"] < len(course.bodies):
                await asyncio.sleep(0.001)
            seconds = time.perf_counter() - begun
        runtime = service.feeds[FEED]
        await runtime.act(runtime.feed.drain)
    finally:
        await service.stop()
    _check(course, folder)
    return seconds


def _check(course: Course, folder: Path) -> None:
    check_files(course, Sent.of(course.trace, course.bounds), folder)


async def _visit(course: Course, program: str) -> Sample:
    import nats  # noqa: PLC0415 - an extra

    with tempfile.TemporaryDirectory(prefix="strandline-bench-") as name:
        async with served(program, Path(name)) as url:
            client = await nats.connect(url)
            await publish(client, course)
            bare = len(course.trace) / await bare_s(client, course)
            durable = len(course.trace) / await durable_s(client, course, Path(name))
            await client.close()
            service = len(course.trace) / await service_s(url, course, Path(name))
    beside = {"events/s": service, "bare events/s": bare, "durable events/s": durable}
    return Sample(service / bare, beside, {DURABLE: service / durable})


def _prepare(program: str, scale: Scale) -> Measure:
    course = course_of(BODY_EVENTS, scale)

    def measure() -> Sample:
        return uvloop.run(_visit(course, program))

    return measure


def rows(scale: Scale) -> list[Row]:
    """One row; none where no server and no client is installed (the extra `test`)."""
    del scale
    program = nats_server()
    if program is None or find_spec("nats") is None:
        return []
    name = f"taking from JetStream, messages of {BODY_EVENTS} events"
    return [Row(name, "x", partial(_prepare, program), GOAL, "at least", also=(Also(DURABLE),))]
