"""Rows on the whole service over HTTP: journal, sync, ordering, NDJSON sink, against a bare handler (see `bare`).

Both run in a process of their own and get the same bodies over the same number of connections, as fast as they answer.
The value is the share of the bare handler's rate that the service reaches, counted from the first body to the last
answer. After each run the service is drained and stopped, and the judge reads its files: a run that is not well has no
figure. Sender and server share the machine's cores, which flatters neither and narrows the difference. The bare
handler always decodes by msgspec; the service as a feed does that says nothing of it, and in rows of their own by
compiled code.

What ordering costs is the same service (delays of 0.5 s, slack 5 s: so nearly all leaves while it is measured, as in
the other run) against passing everything through as it arrives. A feed has no setting for that, so the second run gets
the same bodies but for one thing: every event has the same time, and the slack is 0. Equal times keep their order of
arrival and are never late, so nothing is held, and each body leaves with the mark behind it; the judge checks that.
Books, journal, marks and sink do their work in both.
"""

from __future__ import annotations

import sys
import tempfile
import time
from collections.abc import Mapping
from dataclasses import dataclass, replace
from functools import partial
from pathlib import Path

import numpy as np
import uvloop

from strandline_loadgen.bodies import Body, Style, bodies, cut_by_count
from strandline_loadgen.checker import judge
from strandline_loadgen.child import ChildServer, free_port, serve
from strandline_loadgen.driver import Delivery, Target, send
from strandline_loadgen.evidence import Sent
from strandline_loadgen.shapes import shape
from strandline_loadgen.stores import Reading, read_ndjson
from strandline_loadgen.trace import Int64s, Trace

from .harness import Measure, Row, Sample, Scale

FEED = "bench"
GOAL, ORDERING_GOAL = 0.75, 0.9
CONNECTIONS = {500: 16, 5_000: 8}
EVENTS_SHARE = {500: 0.3, 5_000: 1.0}  # of the scale's events: smaller bodies take longer
PATIENT_FEED = """[[feed]]
name = "bench"
time = {{ at = "/observed_at", unit = "ns" }}
source = "/station"
slack = "{slack}"
idle_after = "1h"
hold_at_most = "1h"
ahead_limit = "1h"
{more}
[[feed.sink]]
"""
WITHOUT_SINK = 'listen = "127.0.0.1:{port}"\ndata_dir = "{folder}/data"\ndrain_at_most = "5m"\n' + PATIENT_FEED
TO_FILES = 'kind = "ndjson"\ndirectory = "{folder}/out"\n'
CONFIGURATION = WITHOUT_SINK + TO_FILES
COMPILED = 'decoding = "compiled"\n'


@dataclass(frozen=True, slots=True)
class Course:
    """Bodies, made before anything is timed; and how they are sent."""

    trace: Trace
    bounds: Int64s
    bodies: list[Body]
    connections: int
    slack: str = "20s"


def course_of(
    body_events: int, scale: Scale, *, mean_s: float = 2.0, slack: str = "20s", events: int | None = None
) -> Course:
    """Exponential delays at 10,000 events a second, the last one just arrived. `events` None: as the scale says."""
    events = int(scale.events * EVENTS_SHARE[body_events]) if events is None else events
    trace = shape("exponential", events, scale.seed, events_per_s=10_000.0, mean_s=mean_s)
    trace = trace.shifted(time.time_ns() - int(trace.arrivals[-1]))
    bounds = cut_by_count(trace, body_events)
    return Course(trace, bounds, list(bodies(trace, bounds, Style("ns"))), CONNECTIONS[body_events], slack)


def passing_through(course: Course) -> Course:
    """The same bodies, but every event has the time of the last one, and the slack is 0."""
    times = np.full(len(course.trace), course.trace.times[-1])
    trace = replace(course.trace, times=times)
    cut = list(bodies(trace, course.bounds, Style("ns")))
    return replace(course, trace=trace, bodies=cut, slack="0s")


async def events_per_s_bare(course: Course, folder: Path) -> float:
    """The yardstick's rate."""
    port = free_port()
    command = [sys.executable, "-m", "strandline_loadgen.bench.bare", str(port), str(folder)]
    async with ChildServer(command, port, folder / "bare.log") as server:
        done = await sent_all(server, course)
        await server.stop()
    return len(course.trace) / done.seconds


async def events_per_s_service(course: Course, folder: Path, more: str = "") -> tuple[float, float]:
    """The service's rate, and the seconds from the last answer until all was delivered and the service had stopped.

    `more` are further keys of the feed.
    """
    port, file = free_port(), folder / "strandline.toml"
    file.write_text(CONFIGURATION.format(port=port, folder=folder.as_posix(), more=more, slack=course.slack))
    async with ChildServer(serve(file), port, folder / "service.log") as server:
        done = await sent_all(server, course)
        answered = time.monotonic()
        await server.drain(FEED)
        code = await server.stop()
        rest_s = time.monotonic() - answered
        if code != 0:
            raise RuntimeError(f"the service ended with {code}, no figure would mean anything:\n{server.last_words()}")
    told = {name: done.sums[name] for name in ("accepted", "late")}
    check_files(course, done.evidence(course.trace, course.bounds), folder, told)
    return len(course.trace) / done.seconds, rest_s


async def sent_all(server: ChildServer, course: Course) -> Delivery:
    done = await send(course.bodies, Target(server.url, FEED, connections=course.connections, keys="bench"))
    if not done.answered.all() or done.refused or done.resent:
        raise RuntimeError(
            f"{np.count_nonzero(~done.answered)} bodies unanswered, {done.refused} refused, {done.resent} resent: no "
            f"figure would mean anything\n{done.failures[:3]}\n{server.last_words()}"
        )
    return done


def check_files(
    course: Course, sent: Sent, folder: Path, told: Mapping[str, int] | None = None, feed: str = FEED
) -> None:
    """Raise RuntimeError unless the judge finds the service's files right."""
    reading = Reading(course.trace.source_names)
    lanes = [read_ndjson(folder / "out", feed, lane, reading) for lane in ("ordered", "late")]
    verdict = judge(sent, *lanes, duplicates=0, told=told)
    if not verdict.ok:
        raise RuntimeError(f"what the service delivered is not right, no figure would mean anything:\n{verdict}")


async def _against_bare(course: Course, more: str) -> Sample:
    with tempfile.TemporaryDirectory(prefix="strandline-bench-") as name:
        bare = await events_per_s_bare(course, Path(name))
        service, rest_s = await events_per_s_service(course, Path(name), more)
    return Sample(service / bare, {"events/s": service, "bare events/s": bare, "s to deliver the rest": rest_s})


async def _against_passing_through(course: Course, unordered: Course) -> Sample:
    rates = []
    for each in (unordered, course):
        with tempfile.TemporaryDirectory(prefix="strandline-bench-") as name:
            rates.append((await events_per_s_service(each, Path(name)))[0])
    return Sample(rates[1] / rates[0], {"events/s": rates[1], "passing through events/s": rates[0]})


def _prepare_bare(body_events: int, more: str, scale: Scale) -> Measure:
    course = course_of(body_events, scale)
    return lambda: uvloop.run(_against_bare(course, more))


def _prepare_passing(body_events: int, scale: Scale) -> Measure:
    course = course_of(body_events, scale, mean_s=0.5, slack="5s")
    unordered = passing_through(course)
    return lambda: uvloop.run(_against_passing_through(course, unordered))


def rows(scale: Scale) -> list[Row]:
    """For each size of body: against a bare handler, also with compiled decoding; and with ordering against without."""
    del scale
    name = "service over HTTP, bodies of {:,} events"
    against = [
        Row(name.format(size) + also, "x", partial(_prepare_bare, size, more), GOAL, "at least")
        for also, more in (("", ""), (", compiled", COMPILED))
        for size in EVENTS_SHARE
    ]
    name = "service over HTTP, ordering on against off, bodies of {:,} events"
    passing = [
        Row(name.format(size), "x", partial(_prepare_passing, size), ORDERING_GOAL, "at least") for size in EVENTS_SHARE
    ]
    return [*against, *passing]
