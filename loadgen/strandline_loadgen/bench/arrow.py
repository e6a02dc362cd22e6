"""Rows on bodies of Arrow columns: stream in, ordered bytes out, in one process, and what each part of the way costs.

Subject: the service's decoder (columns read and checked, every row written as a line of JSON), the core, a journal in
memory and the gathering of every released line, as in `path`. The parts, measured beside it in the same visit: the
columns alone (stream, times, sources), the core with its journal on arrivals that are decoded already, and what is
left, which is the JSON. Beside it the same events on the same way as NDJSON. Sockets and sinks are not in it.
"""

from __future__ import annotations

import importlib
import time
from collections.abc import Iterator
from functools import partial
from typing import Any

import msgspec
from strandline.core.columns import Arrival
from strandline.ingest.arrow import ARROW, arrow_rows
from strandline.ingest.limits import BodyLimits

from strandline_loadgen.bodies import Style
from strandline_loadgen.checker import Sent, judge
from strandline_loadgen.shapes import shape
from strandline_loadgen.stores import Reading, digests_of, with_digests

from .harness import Measure, Row, Sample, Scale
from .path import LIVE_SLACK_NS, MEDIA_TYPE, Course, Lap, MemoryJournal, Path

THREE = ("observed_at", "station", "level")
EVENTS_A_SECOND = 5e6  # the aim, on one core


class ArrowPath(Path):
    """The path for bodies of columns, or for arrivals that were decoded before."""

    def take(self, payload: bytes, now_ns: int, token: int) -> None:
        """One request, up to the bytes that it releases."""
        self.arrive(self.decoded(payload), now_ns, token)

    def decoded(self, payload: bytes) -> Arrival:
        """The body as an arrival, for the table of sources as it is. Lines begin with a brace, streams do not."""
        media_type = MEDIA_TYPE if payload[:1] == b"{" else ARROW
        return self._decoder.decode(payload, media_type, self._feed.state.sources.numbers)

    def arrive(self, arrival: Arrival, now_ns: int, token: int) -> None:
        """An arrival, up to the bytes that it releases."""
        self._carry_out(self._feed.arrive(arrival, now_ns, token))


def _events(payload: bytes, members: tuple[str, ...]) -> Iterator[dict[str, Any]]:
    """The events of a body; a float without a fraction as an integer, which is how its line has it."""
    for event in msgspec.json.Decoder().decode_lines(payload):
        yield {
            name: int(value) if isinstance(value, float) and value.is_integer() else value
            for name, value in event.items()
            if name in members or not members
        }


def _stream(events: list[dict[str, Any]]) -> bytes:
    """Events as one stream: integers, doubles, and the station as a dictionary, as a sender of columns has it."""
    pa: Any = importlib.import_module("pyarrow")
    columns = {}
    for name in events[0]:
        values = [event[name] for event in events]
        is_float = name not in ("observed_at", "station", "id")
        column = pa.array(values, pa.float64() if is_float else None)
        columns[name] = column.dictionary_encode() if name == "station" else column
    table = pa.table(columns)
    out = pa.BufferOutputStream()
    with pa.ipc.new_stream(out, table.schema) as writer:
        writer.write_table(table)
    body: bytes = out.getvalue().to_pybytes()
    return body


def _lap(course: Course, journal: MemoryJournal, lap: Lap, bodies: list[bytes], arrivals: list[Arrival] | None) -> int:
    """One run over the bodies, or over arrivals in their place; processor time in ns."""
    begin = time.process_time_ns()
    path = ArrowPath(course, journal, lap)
    for token, now_ns in enumerate(course.arrivals_ns):
        if arrivals is None:
            path.take(bodies[token], now_ns, token)
        else:
            path.arrive(arrivals[token], now_ns, token)
    path.drain(course.arrivals_ns[-1])
    return time.process_time_ns() - begin


def _arrivals(course: Course, journal: MemoryJournal, bodies: list[bytes]) -> list[Arrival]:
    path, made = ArrowPath(course, journal, Lap()), []
    for token, (body, now_ns) in enumerate(zip(bodies, course.arrivals_ns, strict=True)):
        made.append(path.decoded(body))
        path.arrive(made[-1], now_ns, token)
    return made


def _columns_alone(bodies: list[bytes]) -> int:
    """Reading and checking the streams, times and sources, without a line of JSON; processor time in ns."""
    module, limits = arrow_rows(), BodyLimits()
    pointed = module.Pointed(("observed_at",), "ns", ("station",), None)
    begin = time.process_time_ns()
    for body in bodies:
        names, columns, _ = module.columns_of(body, pointed, limits)
        module.times_of(columns[names.index("observed_at")], "ns")
        module.sources_of(columns[names.index("station")], {})
    return time.process_time_ns() - begin


def _check(course: Course, journal: MemoryJournal, bodies: list[bytes], lines: bytes) -> None:
    """Raise RuntimeError unless the judge finds all well, byte for byte."""
    lap = Lap(keep=True)
    _lap(course, journal, lap, bodies, None)
    reading = Reading(course.trace.source_names, digests=True)
    sent = with_digests(Sent.of(course.trace, course.bounds), digests_of(lines))
    verdict = judge(sent, map(reading.rows, lap.ordered), map(reading.rows, lap.late))
    if lap.refusals or not verdict.ok:
        raise RuntimeError(f"what the path released is not right:\n{verdict}\n{lap.refusals}")


def _prepare(members: tuple[str, ...], body_events: int, scale: Scale) -> Measure:
    trace = shape("one_percent_late", scale.events, scale.seed, events_per_s=10_000.0, late_s_at_most=20.0)
    course = Course.of(trace, body_events, LIVE_SLACK_NS, Style("ns"))
    wanted = members and (*members, "id")  # the judge knows events by their ids
    events = [list(_events(payload, wanted)) for payload in course.payloads]
    encode = msgspec.json.Encoder().encode
    lines = b"".join(encode(event) + b"\n" for body in events for event in body)
    journal = MemoryJournal(course.journal_bytes * 5 // 4)
    _check(course, journal, [_stream(body) for body in events], lines)
    bodies = [_stream([{name: event[name] for name in members or event} for event in body]) for body in events]
    ndjson = [b"".join(encode({name: event[name] for name in members or event}) + b"\n" for event in body)
              for body in events]  # fmt: skip
    arrivals = _arrivals(course, journal, bodies)
    count = len(trace)

    def measure() -> Sample:
        whole = _lap(course, journal, Lap(), bodies, None)
        core = _lap(course, journal, Lap(), bodies, arrivals)
        columns = _columns_alone(bodies)
        lines = _lap(course, journal, Lap(), ndjson, None)
        beside = {
            "ns/event": whole / count,
            "of it JSON": (whole - core - columns) / count,
            "columns": columns / count,
            "core and gathering": core / count,
            "as NDJSON": lines / count,
            "million/s without JSON": count / (core + columns) * 1e3,
        }
        return Sample(count / whole * 1e3, beside)

    return measure


def rows(scale: Scale) -> list[Row]:
    """Millions of events a second, by columns and by how many events a body has."""
    return [
        Row(
            f"Arrow body to release, {name}, bodies of {body_events:,}",
            "million events/s",
            partial(_prepare, members, body_events),
            EVENTS_A_SECOND / 1e6 if members and body_events > scale.body_events else None,
            "at least",
        )
        for name, members in (("3 columns", THREE), ("9 columns", ()))
        for body_events in (scale.body_events, 10 * scale.body_events)
    ]
