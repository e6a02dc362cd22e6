"""Rows on the whole path in one process: body in, ordered bytes out, against decoding the same bodies and no more.

Subject: the service's decoder, the core, a journal in memory (frames are laid down where a disk's would be, without
checksums and syncs) and the gathering of every released line. Yardstick: msgspec's decode_lines into the two members
that the feed names. Sockets and sinks are not in it. Events come at 10,000 a second from 16 gauges, each with an
integer time in ns; live shapes run with a slack of 20 s, so some 200,000 events are held; the backfills (random,
reversed) are held whole and drained.
"""

from __future__ import annotations

import mmap
import time
from collections.abc import Sequence
from dataclasses import dataclass, field
from functools import partial
from importlib.util import find_spec

import msgspec
import numpy as np
from strandline.core.columns import Batch
from strandline.core.effects import Answer, Append, Buffer, Deliver, Effect, Refuse, Sync
from strandline.core.feed import Feed
from strandline.core.records import FRAME_HEADER_BYTES
from strandline.core.settings import Settings
from strandline.ingest.decode import Decoder
from strandline.journal.gather import Copier, Source, block

from strandline_loadgen.bodies import Style, bodies, cut_by_count
from strandline_loadgen.checker import Sent, judge
from strandline_loadgen.shapes import shape
from strandline_loadgen.stores import Reading, digests_of, with_digests
from strandline_loadgen.trace import Int64s, Trace

from .harness import Measure, Row, Sample, Scale

FOREVER_NS = 2**62
LIVE_SLACK_NS = 20_000_000_000
MEDIA_TYPE = "application/x-ndjson"


class TwoMembers(msgspec.Struct, gc=False):
    """What the yardstick decodes: the members that the feed names."""

    observed_at: int
    station: str


class MemoryJournal:
    """Stands in for the journal: one anonymous mapping in which a position is an offset."""

    def __init__(self, size: int) -> None:
        self.size = size
        self._map = mmap.mmap(-1, size)
        self._view = memoryview(self._map)
        self.end = 0
        self.copier: Copier | None = None  # what its lines are copied out with

    def append(self, lsn: int, parts: Sequence[Buffer]) -> None:
        """Lay down a frame. Raises ValueError when the mapping is full."""
        at = lsn + FRAME_HEADER_BYTES
        for part in parts:
            piece = memoryview(part).cast("B") if memoryview(part).nbytes else b""
            self._view[at : at + len(piece)] = piece
            at += len(piece)
        self.end = max(self.end, at)

    def ndjson(self, batch: Batch) -> bytes:
        """A batch's lines, each followed by a line feed."""
        places, lengths = batch.refs["place"].astype(np.int64), batch.refs["length"].astype(np.int64)
        return block([Source(self._view, 0, self.end)], None, places, lengths, self.copier)


@dataclass(frozen=True, slots=True)
class Course:
    """What a row of the path runs over."""

    trace: Trace
    bounds: Int64s
    payloads: list[bytes]
    arrivals_ns: list[int]
    settings: Settings
    journal_bytes: int

    @classmethod
    def of(cls, trace: Trace, body_events: int, slack_ns: int, style: Style) -> Course:
        """Bodies of `body_events` events; a request comes when its last event has arrived."""
        bounds = cut_by_count(trace, body_events)
        cut = list(bodies(trace, bounds, style))
        settings = Settings("bench", slack_ns=slack_ns, idle_after_ns=FOREVER_NS, hold_at_most_ns=FOREVER_NS)
        payloads = [body.payload for body in cut]
        size = sum(map(len, payloads)) + 64 * len(trace) + 8192 * len(cut) + 65536
        return cls(trace, bounds, payloads, [body.due_ns for body in cut], settings, size)


@dataclass(slots=True)
class Lap:
    """One run of the subject over a course: bytes released by lane, and the bytes themselves where they are wanted."""

    keep: bool = False
    is_compiled: bool = False  # how it is decoded
    released_bytes: int = 0
    ordered: list[bytes] = field(default_factory=list)
    late: list[bytes] = field(default_factory=list)
    refusals: list[str] = field(default_factory=list)


def compiled_copier() -> Copier:
    """What the service copies lines with where a feed is decoded by compiled code. Raises ImportError without numba."""
    from strandline.journal.compiled_copies import copied  # noqa: PLC0415 - an extra

    return copied


class Path:
    """Decoder, core and memory journal, joined as the service joins them."""

    def __init__(self, course: Course, journal: MemoryJournal, lap: Lap) -> None:
        self._journal, self._lap = journal, lap
        journal.copier = compiled_copier() if lap.is_compiled else None
        self._feed = Feed(course.settings)
        self._decoder = Decoder("bench", "/observed_at", "ns", "/station", is_compiled=lap.is_compiled)
        self._carry_out(self._feed.start(course.arrivals_ns[0], {}))

    def take(self, payload: bytes, now_ns: int, token: int) -> None:
        """One request, up to the bytes that it releases."""
        arrival = self._decoder.decode(payload, MEDIA_TYPE, self._feed.state.sources.numbers)
        self._carry_out(self._feed.arrive(arrival, now_ns, token))

    def drain(self, now_ns: int) -> None:
        """Let everything go."""
        self._carry_out(self._feed.drain(now_ns, -1))

    @property
    def held(self) -> int:
        """Events held now."""
        return self._feed.state.runs.held

    def _carry_out(self, effects: list[Effect]) -> None:
        for effect in effects:
            match effect:
                case Append():
                    self._journal.append(effect.lsn, effect.parts)
                case Sync():
                    self._carry_out(self._feed.synced(effect.lsn))
                case Deliver():
                    self._deliver(effect.batch)
                case Refuse():
                    self._lap.refusals.append(effect.detail)
                case Answer():
                    pass

    def _deliver(self, batch: Batch) -> None:
        if batch.lane == "quarantine":
            return
        gathered = self._journal.ndjson(batch)
        self._lap.released_bytes += len(gathered)
        if self._lap.keep:
            (self._lap.ordered if batch.lane == "ordered" else self._lap.late).append(gathered)


def run(course: Course, journal: MemoryJournal, lap: Lap) -> int:
    """The subject over a whole course; processor time in ns."""
    begin = time.process_time_ns()
    path = Path(course, journal, lap)
    for token, (payload, now_ns) in enumerate(zip(course.payloads, course.arrivals_ns, strict=True)):
        path.take(payload, now_ns, token)
    path.drain(course.arrivals_ns[-1])
    return time.process_time_ns() - begin


def run_yardstick(course: Course) -> int:
    """decode_lines alone over the same bodies; processor time in ns."""
    decode_lines = msgspec.json.Decoder(TwoMembers).decode_lines
    begin = time.process_time_ns()
    for payload in course.payloads:
        decode_lines(payload)
    return time.process_time_ns() - begin


def check(course: Course, journal: MemoryJournal, is_compiled: bool = False) -> None:
    """Raise RuntimeError unless the judge finds all well, byte for byte."""
    lap = Lap(True, is_compiled)
    run(course, journal, lap)
    reading = Reading(course.trace.source_names, digests=True)
    sent = with_digests(Sent.of(course.trace, course.bounds), digests_of(b"".join(course.payloads)))
    verdict = judge(sent, map(reading.rows, lap.ordered), map(reading.rows, lap.late))
    if lap.refusals or not verdict.ok:
        raise RuntimeError(
            f"what the path released is not right, no figure would mean anything:\n{verdict}\n{lap.refusals}"
        )


def course_of(name: str, scale: Scale) -> Course:
    """The course of a row, by its short name."""
    shapes: dict[str, tuple[str, dict[str, float]]] = {
        "sorted": ("in_order", {}),
        "1 % late": ("one_percent_late", {"late_s_at_most": 20.0}),
        "exponential": ("exponential", {"mean_s": 2.0}),
        "64 bursty gateways": ("bursty_gateways", {"shortest_s": 5.0, "longest_s": 20.0}),
        "random": ("random_order", {}),
        "reversed": ("reversed_order", {}),
    }
    kind, parameters = shapes[name]
    trace = shape(kind, scale.events, scale.seed, events_per_s=10_000.0, **parameters)
    whole = int(trace.times.max() - trace.times.min()) + 1
    slack = whole if name in ("random", "reversed") else LIVE_SLACK_NS
    return Course.of(trace, scale.body_events, slack, Style("ns"))


def _prepare(name: str, is_compiled: bool, journals: list[MemoryJournal], scale: Scale) -> Measure:
    course = course_of(name, scale)
    if not journals or journals[-1].size < course.journal_bytes:
        journals.append(MemoryJournal(course.journal_bytes * 5 // 4))
    journal = journals[-1]
    check(course, journal, is_compiled)

    def measure() -> Sample:
        ours, yardstick = run(course, journal, Lap(is_compiled=is_compiled)), run_yardstick(course)
        events = len(course.trace)
        return Sample(ours / yardstick, {"ns/event": ours / events, "decode_lines ns/event": yardstick / events})

    return measure


GOALS = {
    "sorted": 1.5,
    "1 % late": 1.6,
    "exponential": 2.0,
    "64 bursty gateways": 2.0,
    "random": 4.0,
    "reversed": 2.0,
}


def rows(scale: Scale) -> list[Row]:
    """A row for each shape: how many times the yardstick's time the whole path takes; compiled too, where it can be."""
    journals: list[MemoryJournal] = []  # shared by the rows, which run one at a time; its pages are warm then
    return [
        Row(
            f"body to ordered bytes, {name}{', compiled' * is_compiled}", "x",
            partial(_prepare, name, is_compiled, journals), goal, "at most",
            place={"shape": name, "decoding": "compiled" if is_compiled else "plain"},
        )
        for is_compiled in ((False, True) if find_spec("numba") else (False,))
        for name, goal in GOALS.items()
    ]  # fmt: skip
