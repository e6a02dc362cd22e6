"""The row on doing nothing: processor time of a service with a hundred feeds to which nobody sends anything.

Each feed has a sink of its own. Every feed has been heard once, so that it has sources, a watermark and a mark behind
it; then it is left alone, and /proc is asked how much processor time the process takes over a stretch of wall time.
"""

from __future__ import annotations

import asyncio
import os
import tempfile
import time
from pathlib import Path

import uvloop

from strandline_loadgen.bodies import Style, bodies, cut_by_count
from strandline_loadgen.child import ChildServer, free_port, serve
from strandline_loadgen.driver import Target, send
from strandline_loadgen.shapes import shape

from .harness import Measure, Row, Sample, Scale

FEEDS = 100
GOAL_PERCENT = 0.5
SETTLE_S = 20.0  # by then what was sent is released and flushed, and first snapshots and spare segments are made
WATCH_S, WATCH_S_QUICK = 20.0, 5.0
EVENTS_EACH = 100
HEAD = 'listen = "127.0.0.1:{port}"\ndata_dir = "{folder}/data"\n'
FEED = """
[[feed]]
name = "{name}"
time = {{ at = "/observed_at", unit = "ns" }}
source = "/station"
slack = "1s"
idle_after = "2s"
hold_at_most = "3s"
body_bytes_at_most = "1MiB"
decoded_bytes_at_most = "1MiB"
event_bytes_at_most = "64KiB"
journal = {{ segment_bytes = "1MiB", at_most = "64MiB" }}
[[feed.sink]]
kind = "ndjson"
directory = "{folder}/out"
"""


def names() -> list[str]:
    """The feeds' names."""
    return [f"feed-{number:03d}" for number in range(FEEDS)]


def processor_s(process: int) -> float:
    """Processor time, user and system, that a process has taken so far. Raises OSError where there is no /proc."""
    fields = Path(f"/proc/{process}/stat").read_text().rpartition(")")[2].split()
    return (int(fields[11]) + int(fields[12])) / os.sysconf("SC_CLK_TCK")  # utime and stime, proc(5)


async def _visit(watch_s: float) -> Sample:
    with tempfile.TemporaryDirectory(prefix="strandline-bench-") as name:
        folder, port = Path(name), free_port()
        file = folder / "strandline.toml"
        parts = [HEAD.format(port=port, folder=folder.as_posix())]
        parts += [FEED.format(name=feed, folder=folder.as_posix()) for feed in names()]
        file.write_text("".join(parts))
        async with ChildServer(serve(file), port, folder / "service.log") as server:
            trace = shape("jitter", EVENTS_EACH, 1)
            trace = trace.shifted(time.time_ns() - int(trace.arrivals[-1]))
            cut = list(bodies(trace, cut_by_count(trace, EVENTS_EACH), Style("ns")))
            for feed in names():
                done = await send(cut, Target(server.url, feed, connections=1))
                if not done.answered.all():
                    raise RuntimeError(f"{feed} did not answer: no figure would mean anything\n{done.failures}")
            await asyncio.sleep(SETTLE_S)
            cpu, begin = processor_s(server.process_id), time.monotonic()
            await asyncio.sleep(watch_s)
            taken, wall = processor_s(server.process_id) - cpu, time.monotonic() - begin
            await server.stop()
    share = taken / wall
    return Sample(100 * share, {"ms a second": 1000 * share, "us a feed a second": 1e6 * share / FEEDS})


def _prepare(scale: Scale) -> Measure:
    watch_s = WATCH_S_QUICK if scale.is_quick else WATCH_S

    def measure() -> Sample:
        return uvloop.run(_visit(watch_s))

    return measure


def rows(scale: Scale) -> list[Row]:
    """The one row; none where there is no /proc."""
    del scale
    if not Path("/proc/self/stat").exists():
        return []
    name = f"idle service with {FEEDS} feeds"
    return [Row(name, "% of a core", _prepare, GOAL_PERCENT, warm=False, rounds_at_most=2)]
