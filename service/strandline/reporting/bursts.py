"""From late events by source and second to bursts and totals. Pure."""

from __future__ import annotations

from collections.abc import Iterable

from ..sinks.lane_summary import LateSecond
from .facts import Burst, Late, LateSource

APART_NS = 60_000_000_000
SOURCES_AT_MOST, BURSTS_AT_MOST = 50, 100


def late_of(totals: Iterable[LateSource], seconds: Iterable[LateSecond], *, complete: bool) -> Late:
    """`totals`: of every source; `seconds`: by source, of each in order of time."""
    sources = sorted(totals, key=lambda each: (-each.events, each.source or ""))
    bursts = _bursts(seconds)
    chosen = sorted(range(len(bursts)), key=lambda at: -bursts[at].events)[:BURSTS_AT_MOST]
    listed = sorted((bursts[at] for at in chosen), key=lambda burst: (burst.from_ns, burst.source or ""))
    return Late(
        events=sum(each.events for each in sources),
        sources=sources[:SOURCES_AT_MOST],
        unlisted_sources=len(sources[SOURCES_AT_MOST:]),
        unlisted_events=sum(each.events for each in sources[SOURCES_AT_MOST:]),
        bursts=listed,
        unlisted_bursts=len(bursts) - len(listed),
        complete=complete,
    )


def _bursts(seconds: Iterable[LateSecond]) -> list[Burst]:
    joined: list[LateSecond] = []
    for each in seconds:
        last = joined[-1] if joined else None
        if last is None or last.source != each.source or each.from_ns - last.to_ns > APART_NS:
            joined.append(each)
            continue
        joined[-1] = LateSecond(
            each.source,
            last.events + each.events,
            last.from_ns,
            each.to_ns,
            min(last.late_by_least_ns, each.late_by_least_ns),
            max(last.late_by_most_ns, each.late_by_most_ns),
        )
    return [Burst(**each._asdict()) for each in joined]
