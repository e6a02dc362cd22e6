"""The row on how soon an event leaves once the watermark has passed it, at half the highest rate.

Two runs of a service with the SQLite sink: in the first bodies come as fast as they are answered, and the highest rate
is the one at which all of it was also delivered. In the second the bodies come on a fixed schedule at half that rate,
whether or not earlier ones have been answered, and `latency_child` times. The value is the 99th percentile of the
release latency over two syncs and one commit of the sink at their 99th percentiles in the same run.
"""

from __future__ import annotations

import asyncio
import sys
import tempfile
import time
from pathlib import Path

import msgspec
import uvloop

from strandline_loadgen.child import ChildServer, free_port
from strandline_loadgen.driver import Target, at_once, every, send

from .harness import Measure, Row, Sample, Scale
from .service import FEED, WITHOUT_SINK, Course, course_of

BODY_EVENTS = 500
EVENTS_SHARE, EVENTS_AT_LEAST = 0.5, 200_000  # of the scale's events; 10,000 a second: less is shorter than the slack
GOAL = 1.0  # times (two syncs and one commit)
CONFIGURATION = WITHOUT_SINK + 'kind = "sqlite"\npath = "{folder}/store.db"\n'


async def _run(course: Course, rate: float | None, folder: Path) -> tuple[float, dict[str, float]]:
    """Events a second up to the last one delivered, and what the child timed. `rate`: events a second; None: at once"""
    port, file, result = free_port(), folder / "strandline.toml", folder / "timings.json"
    file.write_text(CONFIGURATION.format(port=port, folder=folder.as_posix(), more="", slack=course.slack))
    command = [sys.executable, "-m", "strandline_loadgen.bench.latency_child", str(file), str(result)]
    async with ChildServer(command, port, folder / "service.log") as server:
        begin = time.monotonic()
        schedule = at_once if rate is None else every(BODY_EVENTS / rate)
        target = Target(server.url, FEED, connections=course.connections, keys="bench")
        done = await send(course.bodies, target, schedule)
        if not done.answered.all() or done.sums["accepted"] + done.sums["late"] != len(course.trace):
            raise RuntimeError(f"not all was answered: no figure would mean anything\n{done.failures[:3]}")
        await server.drain(FEED)
        await _until_delivered(server)
        seconds = time.monotonic() - begin
        if code := await server.stop():
            raise RuntimeError(f"the service ended with {code}:\n{server.last_words()}")
    return len(course.trace) / seconds, msgspec.json.decode(result.read_bytes(), type=dict[str, float])


async def _until_delivered(server: ChildServer) -> None:
    """Until the sink has taken all that was released."""
    while True:
        seen = await server.look(FEED) or {}
        lanes = [lane for sink in seen.get("sinks", {}).values() for lane in sink["lanes"].values()]
        if lanes and not any(lane["waiting_events"] for lane in lanes):
            return
        await asyncio.sleep(0.02)


async def _visit(course: Course) -> Sample:
    with tempfile.TemporaryDirectory(prefix="strandline-bench-") as name:
        highest, _ = await _run(course, None, Path(name))
    with tempfile.TemporaryDirectory(prefix="strandline-bench-") as name:
        _, timed = await _run(course, highest / 2, Path(name))
    if not timed["releases"]:
        raise RuntimeError("nothing was released while it was timed: no figure would mean anything")
    allowed = 2 * timed["sync p99"] + timed["commit p99"]
    beside = {
        "highest events/s": highest,
        "release p50 ms": 1000 * timed["release p50"],
        "release p99 ms": 1000 * timed["release p99"],
        "sync p99 ms": 1000 * timed["sync p99"],
        "commit p99 ms": 1000 * timed["commit p99"],
        "events released": timed["releases"],
    }
    return Sample(timed["release p99"] / allowed, beside)


def _prepare(scale: Scale) -> Measure:
    events = max(EVENTS_AT_LEAST, int(scale.events * EVENTS_SHARE)) // BODY_EVENTS * BODY_EVENTS
    course = course_of(BODY_EVENTS, scale, mean_s=0.5, slack="5s", events=events)

    def measure() -> Sample:
        return uvloop.run(_visit(course))

    return measure


def rows(scale: Scale) -> list[Row]:
    """The one row."""
    del scale
    name = "release latency p99 at half the highest rate, over 2 syncs and 1 commit at p99"
    return [Row(name, "x", _prepare, GOAL, warm=False)]
