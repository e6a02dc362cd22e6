"""What a feed looks like from outside, as plain documents: state, hold, books, hops, sinks, and what stands still.

Times leave as RFC 3339 text, ages in seconds, for people; `*_ns` for programs. Reads only; no HTTP.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import asdict
from typing import Any

from .core.columns import TIME_MIN
from .core.records import ActRecord
from .core.view import HOLD_WHYS, SourceView, Steering, View
from .hops import Hop
from .ingest.timestamps import format_rfc3339
from .intake.starting import intake_documents, intake_stalls
from .runtime import FeedRuntime
from .sinks.delivery import DeliveryState

STALLED_AFTER_S = 30.0


def time_text(time_ns: int | None) -> str | None:
    """An instant as RFC 3339 text; None for one that has not come."""
    return None if time_ns is None or time_ns == TIME_MIN else format_rfc3339(time_ns)


def age_s(now_ns: int, then_ns: int | None) -> float | None:
    """Seconds since an instant; None for one that has not come."""
    return None if then_ns is None or then_ns == TIME_MIN else round((now_ns - then_ns) / 1e9, 3)


def feed_document(runtime: FeedRuntime) -> dict[str, Any]:
    """One feed, as GET /v1/feeds/{feed} answers it."""
    view, hops = runtime.view(), runtime.hops()
    return {
        "name": view.name,
        "now": time_text(view.now_ns),
        "state": state_of(runtime, stalls_of(runtime, view, hops)),
        "failure": runtime.failure,
        "clock": view.clock,
        "order": view.order,
        "watermark": time_text(view.watermark_ns),
        "watermark_ns": None if view.watermark_ns == TIME_MIN else view.watermark_ns,
        "watermark_age_s": age_s(view.now_ns, view.watermark_ns),
        "newest": time_text(view.newest_ns),
        "slack_s": view.slack_ns / 1e9,
        "slack_set": _slack_set(view),
        "steering": steering_document(view),
        "hold": _hold(view),
        "held": _held(view),
        "ledger": {**view.ledger, "balanced": view.balance == 0},
        "sources": {"known": view.sources, "active": view.sources_active},
        "promises": {"broken": view.promises_broken, "broken_most_by": view.promises_broken_by},
        "last_batch": {lane: number - 1 for lane, number in view.next_number.items()},
        "marks": view.marks,
        "refusals": view.refusals,
        "repeats": _repeats(runtime, view),
        "journal": _journal(runtime),
        "hops": {
            name: {
                "waiting": hop.waiting,
                "oldest_age_s": age_s(view.now_ns, hop.oldest_ns),
                "last_advanced": time_text(hop.advanced_ns),
            }
            for name, hop in hops.items()
        },
        "repairs": {name: asdict(repairer.state()) for name, repairer in runtime.repairers.items()},
        "intake": intake_documents(runtime),
        "sinks": {name: _sink(runtime, view, name) for name in runtime.deliveries},
    }


def steering_document(view: View) -> dict[str, Any] | None:
    """A steered slack: target, shares reached, bound, contradiction; None for a fixed one."""
    steering = view.steering
    if steering is None:
        return None
    words = "the slack is steered" if steering.by_source is None else "each source has a slack of its own, steered"
    if steering.warming_up:
        words = "warming up: the longest wait holds until the first events have shown how late they come"
    elif steering.binding:
        words = (
            f"target and longest wait contradict each other: a late share of {steering.target:g} needs more than "
            f"{steering.at_most_ns / 1e9:g} s; with that wait it is about {steering.attainable:.2g}"
        )
        if steering.by_source is not None:
            words += f", for {steering.binding_most}; so it is with {steering.by_source.binding} sources"
    return {
        "late_share_target": steering.target,
        "late_share_last_minute": steering.share_minute,
        "late_share_last_hour": steering.share_hour,
        "late_share_since_begin": steering.share_begun,
        "late_share_this_stretch": steering.share_stretch,
        "bound_this_stretch": steering.bound,
        "at_most_s": steering.at_most_ns / 1e9,
        "at_least_s": steering.at_least_ns / 1e9,
        "contradiction": steering.binding,
        "attainable_late_share": steering.attainable,
        "explanation": words,
        **_of_sources(steering),
    }


def _of_sources(steering: Steering) -> dict[str, Any]:
    """The slacks of sources that each have their own, in a few figures; each by itself is at .../sources."""
    own = steering.by_source
    if own is None:
        return {}
    return {
        "by_source": {
            "slack_median_s": None if own.median_ns is None else own.median_ns / 1e9,
            "slack_longest_s": own.longest_ns / 1e9,
            "warming_up": own.warming_up,
            "contradiction": own.binding,
            "contradiction_most_of": steering.binding_most,
        }
    }


def own_slack(source: SourceView) -> dict[str, Any]:
    """What GET /v1/feeds/{feed}/sources says of a source's own slack; nothing where sources have none."""
    own = source.steering
    if own is None or source.slack_ns is None:
        return {}
    return {
        "slack_s": source.slack_ns / 1e9,
        "late_share": own.late / own.events if own.events else None,
        "steering": {
            "slack_s": own.slack_ns / 1e9,  # as it is steered, also while another one is set for a time
            "events": own.events,
            "late_events": own.late,
            "late_share_this_stretch": own.share_stretch,
            "bound_this_stretch": own.bound,
            "warming_up": own.warming_up,
            "contradiction": own.binding,
            "attainable_late_share": own.attainable,
        },
    }


def _hold(view: View) -> dict[str, Any]:
    return {
        "why": view.hold.why,
        "explanation": HOLD_WHYS[view.hold.why],
        "source": view.hold_source,
        "sink": view.hold.sink or None,
        "idle_at": time_text(view.hold.idle_ns),
        "since": time_text(view.hold.since_ns),
        "for_s": age_s(view.now_ns, view.hold.since_ns),
    }


def _slack_set(view: View) -> dict[str, Any] | None:
    """The slack that an operator has set for a time, or None: then the configured one holds."""
    act = view.slack_set
    if act is None or act.slack_ns is None:
        return None
    return {"slack_s": act.slack_ns / 1e9, "until": time_text(act.until_ns), **_who(act)}


def _who(act: ActRecord) -> dict[str, str | None]:
    return {"who": act.who, "since": time_text(act.now_ns), "reason": act.reason}


def _held(view: View) -> dict[str, Any]:
    lengths = sorted(view.open_runs, reverse=True)
    return {
        "events": view.held_events,
        "oldest_arrived": time_text(view.held_oldest_ns),
        "oldest_age_s": age_s(view.now_ns, view.held_oldest_ns),
        "open_runs": len(lengths),
        "longest_runs": lengths[:10],
    }


def _repeats(runtime: FeedRuntime, view: View) -> dict[str, Any]:
    config = runtime.config
    return {
        "id": config.id,
        "id_window_events": config.id_window_events if config.id else 0,
        "identities_known": view.identities_known,
        "keys_at_most": config.keys_at_most,
        "keys_kept_for_s": config.keys_kept_for_ns / 1e9,
        "keys_kept": view.keys_kept,
    }


def _journal(runtime: FeedRuntime) -> dict[str, Any]:
    journal = runtime.journal
    return {
        "bytes": journal.bytes_used,
        "bytes_at_most": runtime.config.journal.at_most_bytes,
        "first_lsn": journal.first_lsn,
        "next_lsn": runtime.feed.next_lsn,
        "unsynced_bytes": journal.queued_bytes,
    }


def state_of(runtime: FeedRuntime, stalls: Sequence[str]) -> str:
    """In a word: "failed", "stopping", "stalled" or "running"; `stalls` as `stalls_of` found them."""
    if runtime.failure is not None:
        return "failed"
    if not runtime.accepting:
        return "stopping"
    return "stalled" if stalls else "running"


def stalls_of(runtime: FeedRuntime, view: View, hops: Mapping[str, Hop]) -> list[str]:
    """Sentences about work that waits while nothing advances; empty when all is well. View and hops as they are now."""
    found = intake_stalls(runtime, STALLED_AFTER_S)
    bound_s = STALLED_AFTER_S + runtime.config.hold_at_most_ns / 1e9
    held_s = age_s(view.now_ns, view.held_oldest_ns)
    if held_s is not None and held_s > bound_s:
        found.append(f"an event has been held for {held_s:.0f} s, hold_at_most is {bound_s - STALLED_AFTER_S:.0f} s")
    waits_s = age_s(view.now_ns, hops["journal"].oldest_ns)
    if waits_s is not None and waits_s > STALLED_AFTER_S:
        found.append(f"a request has waited for a sync of the journal for {waits_s:.0f} s: the disk does not answer")
    for name, delivery in runtime.deliveries.items():
        state = delivery.state()
        for lane, waiting in state.lanes.items():
            since = max(waiting.oldest_instant_ns or 0, waiting.advanced_at_ns or 0)
            waits_s = age_s(view.now_ns, since) if waiting.batches else None
            if waits_s is not None and waits_s > STALLED_AFTER_S + delivery.flush_after_s:
                why = paused_words(view, name) or state.last_error or "it does not answer"
                found.append(f"sink {name} has taken nothing of lane {lane} for {waits_s:.0f} s: {why}")
    return found


def paused_words(view: View, sink: str) -> str:
    """Who has paused a sink, since when and why, in words; nothing if it is not paused."""
    act = view.paused.get(sink)
    return f"it is paused by {act.who} since {time_text(act.now_ns)}: {act.reason}" if act else ""


def _sink(runtime: FeedRuntime, view: View, name: str) -> dict[str, Any]:
    state: DeliveryState = runtime.deliveries[name].state()
    lanes = {}
    for lane, waiting in state.lanes.items():
        lanes[lane] = {
            "waiting_batches": waiting.batches,
            "waiting_events": waiting.events,
            "oldest_age_s": age_s(view.now_ns, waiting.oldest_instant_ns),
            "taken_up_to_batch": waiting.reached,
            "last_advanced": time_text(waiting.advanced_at_ns),
        }
    return {
        "lanes": lanes,
        "connected": state.opened,
        "paused": state.paused,
        "pause": _who(view.paused[name]) if name in view.paused else None,
        "failing_since": time_text(state.failing_since_ns),
        "last_error": state.last_error,
        "retries": state.retries,
        "counts": state.counts,
    }
