"""One moment of a feed as the document that a browser draws: pure, views in, plain values out.

Times are whole milliseconds since 1970, None where not yet; ages and durations are seconds. Source names are the text
as it came, at most 256 bytes (`ingest.values` takes no longer one).
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from typing import Any

from ..core.columns import TIME_MIN
from ..core.own import OwnWatermarks
from ..core.sources import Sources
from ..core.view import HOLD_WHYS, View
from ..documents import age_s
from ..hops import Hop
from ..intake.counts import Counts
from ..sinks.delivery import DeliveryState
from .lanes import Part
from .sampling import Rates
from .strands import OfSource

STRANDS_AT_MOST = 8
LATE_AT_MOST = 20
Json = dict[str, Any]


def ms(time_ns: int | None) -> int | None:
    """An instant in milliseconds; None for one that has not come."""
    return None if time_ns is None or time_ns == TIME_MIN else time_ns // 1_000_000


def feed_part(view: View, rates: Rates, hops: Mapping[str, Hop], sinks: Iterable[DeliveryState]) -> Json:
    """What is the same for everybody who watches the feed."""
    return {
        "feed": view.name,
        "now_ms": ms(view.now_ns),
        "clock": view.clock,
        "order": view.order,
        "watermark_ms": ms(view.watermark_ns),
        "newest_ms": ms(view.newest_ns),
        "slack_s": view.slack_ns / 1e9,
        "hold": {
            "why": view.hold.why,
            "explanation": HOLD_WHYS[view.hold.why],
            "source": view.hold_source,
            "sink": view.hold.sink or None,
            "idle_ms": ms(view.hold.idle_ns),
            "since_ms": ms(view.hold.since_ns),
            "for_s": age_s(view.now_ns, view.hold.since_ns),
        },
        "held": {
            "events": view.held_events,
            "oldest_ms": ms(view.held_oldest_ns),
            "open_runs": len(view.open_runs),
            "longest_runs": sorted(view.open_runs, reverse=True)[:10],
        },
        "ledger": {**view.ledger, "balanced": view.balance == 0},
        "rates": {f"{name}_per_s": round(rate, 3) for name, rate in rates.books.items()},
        "hops": [_hop(name, hop, view.now_ns, rates) for name, hop in hops.items()],
        "sinks": [_sink(state, view.now_ns) for state in sinks],
    }


def _hop(name: str, hop: Hop, now_ns: int, rates: Rates) -> Json:
    return {
        "name": name,
        "waiting": hop.waiting,
        "oldest_s": age_s(now_ns, hop.oldest_ns),
        "last_advanced_ms": ms(hop.advanced_ns),
        "rate_per_s": round(rates.passed[name], 3),
        "counts": "bodies" if name in ("ingest", "decode") else "events",
    }


def _sink(state: DeliveryState, now_ns: int) -> Json:
    lanes = state.lanes.values()
    oldest = min((lane.oldest_instant_ns for lane in lanes if lane.oldest_instant_ns is not None), default=None)
    return {
        "name": state.sink,
        "waiting_events": sum(lane.events for lane in lanes),
        "oldest_s": age_s(now_ns, oldest),
        "connected": state.opened,
        "paused": state.paused,
        "last_error": state.last_error,
        "failing_since_ms": ms(state.failing_since_ns),
    }


def intake_part(counts: Counts, now_ns: int) -> Json:
    """One intake: its broker, and what waits there or is under way."""
    paused_ns = counts.paused_until_ns or 0
    return {
        "name": counts.name,
        "kind": counts.kind,
        "connected": counts.connected,
        "since_ms": ms(counts.since_ns),
        "words": counts.words,
        "paused_until_ms": ms(paused_ns) if paused_ns > now_ns else None,
        "waiting_messages": counts.waiting,
        "in_flight_messages": counts.in_flight,
        "last_error": counts.last_error,
    }


def lanes_part(
    sources: Sources,
    part: Part,
    chosen: Sequence[int],
    held: Mapping[int, OfSource],
    late: Mapping[int, Sequence[tuple[int, int]]],
    own: OwnWatermarks | None,
) -> list[Json]:
    """The lanes of the chosen sources, in that order."""
    return [
        {
            "source": sources.names[number],
            "role": part.role(number),
            "newest_ms": ms(int(sources.newest[number])),
            "heard_ms": ms(int(sources.heard[number])),
            "active": bool(sources.active[number]),
            "excused": bool(sources.excused[number]),
            "promised_ms": ms(int(sources.promised[number])),
            "held_events": held[number].events,
            "strands": [[ms(head_ns), ms(tail_ns), events] for head_ns, tail_ns, events in held[number].strands],
            "late": [[ms(arrived_ns), ms(time_ns)] for arrived_ns, time_ns in late[number]],
            **({} if own is None else {"watermark_ms": ms(int(own.at[number]))}),
        }
        for number in chosen
    ]


def rest_part(view: View, part: Part, lanes: Sequence[Json]) -> Json:
    """What is not among the lanes, in sum. Held events are estimated where the lanes' are."""
    return {
        "sources": view.sources - len(lanes),
        "active": view.sources_active - sum(lane["active"] for lane in lanes),
        "silent": part.silent_count - sum(lane["role"] == "silent" for lane in lanes),
        "held_events": max(0, view.held_events - sum(lane["held_events"] for lane in lanes)),
    }
