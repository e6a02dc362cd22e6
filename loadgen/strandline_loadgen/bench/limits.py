"""Rows on limits, without goals: what no ingest on this machine can be faster than.

Copying every body once in memory; reading bodies from a socket through aiohttp and discarding them. The service's own
rates stand in the rows of `service`.
"""

from __future__ import annotations

import sys
import tempfile
import time
from functools import partial
from pathlib import Path

import uvloop

from strandline_loadgen.bodies import Style, bodies, cut_by_count
from strandline_loadgen.child import ChildServer, free_port
from strandline_loadgen.shapes import shape

from .harness import Measure, Row, Sample, Scale
from .service import EVENTS_SHARE, Course, course_of, sent_all


async def events_per_s_discarding(course: Course, folder: Path) -> float:
    """The rate of a handler that reads bodies and keeps nothing."""
    port = free_port()
    command = [sys.executable, "-m", "strandline_loadgen.bench.bare", str(port), str(folder), "discard"]
    async with ChildServer(command, port, folder / "discard.log") as server:
        done = await sent_all(server, course)
        await server.stop()
    return len(course.trace) / done.seconds


def _discarding(body_events: int, scale: Scale) -> Measure:
    course = course_of(body_events, scale)

    async def visit() -> float:
        with tempfile.TemporaryDirectory(prefix="strandline-bench-") as name:
            return await events_per_s_discarding(course, Path(name))

    def measure() -> Sample:
        rate = uvloop.run(visit())
        return Sample(rate, {"MB/s": rate * sum(len(b.payload) for b in course.bodies) / len(course.trace) / 1e6})

    return measure


def _copying(scale: Scale) -> Measure:
    trace = shape("in_order", scale.events, scale.seed)
    payloads = [bytes(body.payload) for body in bodies(trace, cut_by_count(trace, scale.body_events), Style("ns"))]
    room = memoryview(bytearray(sum(map(len, payloads))))

    def measure() -> Sample:
        at, begin = 0, time.process_time_ns()
        for payload in payloads:
            room[at : at + len(payload)] = payload
            at += len(payload)
        taken = time.process_time_ns() - begin
        return Sample(taken / len(trace), {"GB/s": at / taken, "bytes an event": at / len(trace)})

    return measure


def rows(scale: Scale) -> list[Row]:
    """Copying, and reading and discarding bodies of each size."""
    del scale
    read = "limit: aiohttp reads and discards, bodies of {:,} events"
    return [
        Row("limit: copying bodies in memory", "ns/event", _copying),
        *(Row(read.format(size), "events/s", partial(_discarding, size), sense="at least") for size in EVENTS_SHARE),
    ]
