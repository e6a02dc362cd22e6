"""Rows on how the core's cost for an event grows: with what is held, and with the number of sources.

Subject: the whole core (books, records, marks, runs, batches), without decoder, journal, sockets and sinks. Both ends
of a comparison are measured in the same visit, in the steady state, over the same number of events in requests of the
same size; the value is the cost at the larger end over the cost at the smaller one.
"""

from __future__ import annotations

import time
from collections.abc import Iterator
from dataclasses import dataclass
from functools import lru_cache, partial

import numpy as np
from strandline.core.columns import Arrival
from strandline.core.effects import Sync
from strandline.core.feed import Feed
from strandline.core.settings import Settings

from strandline_loadgen.shapes import shape
from strandline_loadgen.trace import Trace

from .harness import Measure, Row, Sample, Scale
from .path import FOREVER_NS

GOAL = 1.5
EVENTS_PER_S = 10_000.0
MEASURED_EVENTS = 200_000
LINE_BYTES = 150
SMALL_HELD, SOURCES = 10_000, 10_000
MEAN_S = 0.2  # of the delays where they stay what they are


@dataclass(frozen=True, slots=True)
class Case:
    """One end of a comparison. `mean_s`: of the exponential delays; `slack_s`: what holds the events."""

    name: str
    slack_s: float
    mean_s: float
    sources: int = 1


def held_case(held: int, *, wider: bool) -> Case:
    """So many held: with the same delays and more slack, or (`wider`) with delays that grow as the slack does."""
    if wider:
        slack_s = held / EVENTS_PER_S / 0.8  # as in the ordering rows
        return Case(f"{held:,} held", slack_s, slack_s / 5)
    return Case(f"{held:,} held", held / EVENTS_PER_S + MEAN_S, MEAN_S)


def sources_case(sources: int) -> Case:
    """So many sources; a source speaks once a second on average where there are 10^4."""
    return Case(f"{sources:,} sources", 12.5, 2.5, sources)


@lru_cache(maxsize=2)
def _trace(case: Case, seed: int, filling: int) -> Trace:
    more = int(2 * case.slack_s * EVENTS_PER_S)  # so that the end of the trace, where stragglers come, is not used
    given = {"events_per_s": EVENTS_PER_S, "mean_s": case.mean_s, "sources": case.sources, "start_ns": 0}
    return shape("exponential", filling + MEASURED_EVENTS + more, seed, **given)


def _filling(case: Case, body_events: int) -> int:
    """Events until all is steady: twice the slack, and every source heard."""
    batches = int(2 * case.slack_s * EVENTS_PER_S / body_events) + 2
    return body_events * max(batches, 20 * case.sources // body_events)


def _arrivals(trace: Trace, events: int, body_events: int) -> Iterator[tuple[Arrival, int]]:
    """Requests as the decoder would hand them over, with their arrival times."""
    lengths = np.full(body_events, LINE_BYTES - 1, dtype=np.uint32)
    payload = bytes(body_events * LINE_BYTES)
    numbers = np.full(len(trace.source_names), -1, dtype=np.int64)
    known = 0
    for start in range(0, events, body_events):
        rows = slice(start, start + body_events)
        drawn = trace.sources[rows]
        _, first = np.unique(drawn, return_index=True)
        fresh = [int(source) for source in drawn[np.sort(first)] if numbers[source] < 0]
        numbers[fresh] = np.arange(known, known + len(fresh))
        known += len(fresh)
        names = [trace.source_names[source] for source in fresh]
        arrival = Arrival(trace.times[rows], numbers[drawn].astype(np.uint32), lengths, payload, names)
        yield arrival, int(trace.arrivals[rows.stop - 1])


def ns_per_event(case: Case, scale: Scale) -> tuple[float, int]:
    """Processor time of the core in ns an event, in the steady state; and the events held at its end."""
    filling = _filling(case, scale.body_events)
    trace = _trace(case, scale.seed, filling)
    feed = Feed(
        Settings(
            "bench", slack_ns=int(case.slack_s * 1e9), idle_after_ns=FOREVER_NS, hold_at_most_ns=FOREVER_NS,
            held_events_at_most=10**9,
        )
    )  # fmt: skip
    feed.synced(feed.next_lsn if feed.start(0, {}) else 0)
    arrivals = _arrivals(trace, filling + MEASURED_EVENTS, scale.body_events)
    for _ in range(filling // scale.body_events):
        _take(feed, *next(arrivals))
    rest, begin = list(arrivals), time.process_time_ns()
    for arrival, now_ns in rest:
        _take(feed, arrival, now_ns)
    return (time.process_time_ns() - begin) / MEASURED_EVENTS, feed.state.runs.held


def _take(feed: Feed, arrival: Arrival, now_ns: int) -> None:
    for effect in feed.arrive(arrival, now_ns, 0):
        if isinstance(effect, Sync):
            feed.synced(effect.lsn)


def _prepare(small: Case, large: Case, scale: Scale) -> Measure:
    def measure() -> Sample:
        below, held_below = ns_per_event(small, scale)
        above, held_above = ns_per_event(large, scale)
        beside = {f"{small.name} ns/event": below, f"{large.name} ns/event": above}
        return Sample(above / below, beside, note=f"{held_below:,} and {held_above:,} held")

    return measure


def rows(scale: Scale) -> list[Row]:
    """From 10^4 held to the most of this scale, both ways; from one source to 10^4."""
    held = scale.held[-1]
    found = [
        Row(
            f"growth of the core's cost from {SMALL_HELD:,} to {held:,} held, {how}",
            "x",
            partial(_prepare, held_case(SMALL_HELD, wider=wider), held_case(held, wider=wider)),
            GOAL,
        )
        for how, wider in (("the same delays", False), ("delays that grow as well", True))
    ]
    name = f"growth of the core's cost from 1 to {SOURCES:,} sources"
    return [*found, Row(name, "x", partial(_prepare, sources_case(1), sources_case(SOURCES)), GOAL)]
