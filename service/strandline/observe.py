"""What can be seen over HTTP: feeds, sources, lanes, the ordered output, health. Reads only; changes nothing.

Times leave as RFC 3339 text, durations in seconds, for people; `*_ns` stay for programs.
"""

from __future__ import annotations

import asyncio
from collections.abc import Iterator
from dataclasses import asdict
from typing import Any

import msgspec
from aiohttp import web

from .core.columns import TIME_MIN, Batch
from .core.view import HOLD_WHYS, View, sources_of
from .errors import JournalError
from .ingest.endpoint import FEEDS, runtime_of
from .ingest.timestamps import format_rfc3339
from .problems import problem
from .runtime import FeedRuntime
from .sinks.delivery import DeliveryState
from .sinks.lanes import late_rows, quarantine_rows

ROWS_AT_MOST = 1000
STALLED_AFTER_S = 30.0
KEEPALIVE_S = 15.0


def _json(value: object, status: int = 200) -> web.Response:
    return web.Response(status=status, body=msgspec.json.encode(value), content_type="application/json")


def _time(time_ns: int | None) -> str | None:
    return None if time_ns is None or time_ns == TIME_MIN else format_rfc3339(time_ns)


def _age_s(now_ns: int, then_ns: int | None) -> float | None:
    return None if then_ns is None or then_ns == TIME_MIN else round((now_ns - then_ns) / 1e9, 3)


def feed_document(runtime: FeedRuntime) -> dict[str, Any]:
    """One feed, as GET /v1/feeds/{feed} answers it."""
    view = runtime.view()
    lengths = sorted(view.open_runs, reverse=True)
    return {
        "name": view.name,
        "now": _time(view.now_ns),
        "state": state_of(runtime),
        "failure": runtime.failure,
        "clock": view.clock,
        "watermark": _time(view.watermark_ns),
        "watermark_ns": None if view.watermark_ns == TIME_MIN else view.watermark_ns,
        "watermark_age_s": _age_s(view.now_ns, view.watermark_ns),
        "newest": _time(view.newest_ns),
        "slack_s": view.slack_ns / 1e9,
        "hold": {
            "why": view.hold.why,
            "explanation": HOLD_WHYS[view.hold.why],
            "source": view.hold_source,
            "since": _time(view.hold.since_ns),
            "for_s": _age_s(view.now_ns, view.hold.since_ns),
        },
        "held": {
            "events": view.held_events,
            "oldest_arrived": _time(view.held_oldest_ns),
            "oldest_age_s": _age_s(view.now_ns, view.held_oldest_ns),
            "open_runs": len(lengths),
            "longest_runs": lengths[:10],
        },
        "ledger": {**view.ledger, "balanced": view.balance == 0},
        "sources": {"known": view.sources, "active": view.sources_active},
        "last_batch": {lane: number - 1 for lane, number in view.next_number.items()},
        "marks": view.marks,
        "refusals": view.refusals,
        "journal": {
            "bytes": runtime.journal.bytes_used,
            "bytes_at_most": runtime.config.journal.at_most_bytes,
            "first_lsn": runtime.journal.first_lsn,
            "next_lsn": runtime.feed.next_lsn,
            "unsynced_bytes": runtime.journal.queued_bytes,
        },
        "hops": {
            name: {
                "waiting": hop.waiting,
                "oldest_age_s": _age_s(view.now_ns, hop.oldest_ns),
                "last_advanced": _time(hop.advanced_ns),
            }
            for name, hop in runtime.hops().items()
        },
        "sinks": {name: _sink(runtime, view, name) for name in runtime.deliveries},
    }


def state_of(runtime: FeedRuntime) -> str:
    """In a word: "failed", "stopping", "stalled" or "running"."""
    if runtime.failure is not None:
        return "failed"
    if not runtime.accepting:
        return "stopping"
    return "stalled" if stalls_of(runtime) else "running"


def stalls_of(runtime: FeedRuntime) -> list[str]:
    """Sentences about work that waits while nothing advances; empty when all is well."""
    view, found = runtime.view(), []
    bound_s = STALLED_AFTER_S + runtime.config.hold_at_most_ns / 1e9
    held_s = _age_s(view.now_ns, view.held_oldest_ns)
    if held_s is not None and held_s > bound_s:
        found.append(f"an event has been held for {held_s:.0f} s, hold_at_most is {bound_s - STALLED_AFTER_S:.0f} s")
    for name, delivery in runtime.deliveries.items():
        state = delivery.state()
        for lane, waiting in state.lanes.items():
            since = max(waiting.oldest_instant_ns or 0, waiting.advanced_at_ns or 0)
            waits_s = _age_s(view.now_ns, since) if waiting.batches else None
            if waits_s is not None and waits_s > STALLED_AFTER_S + delivery.flush_after_s:
                why = state.last_error or ("it is paused" if state.paused else "it does not answer")
                found.append(f"sink {name} has taken nothing of lane {lane} for {waits_s:.0f} s: {why}")
    return found


def _sink(runtime: FeedRuntime, view: View, name: str) -> dict[str, Any]:
    state: DeliveryState = runtime.deliveries[name].state()
    lanes = {}
    for lane, waiting in state.lanes.items():
        lanes[lane] = {
            "waiting_batches": waiting.batches,
            "waiting_events": waiting.events,
            "oldest_age_s": _age_s(view.now_ns, waiting.oldest_instant_ns),
            "taken_up_to_batch": waiting.reached,
            "last_advanced": _time(waiting.advanced_at_ns),
        }
    return {
        "lanes": lanes,
        "connected": state.opened,
        "paused": state.paused,
        "failing_since": _time(state.failing_since_ns),
        "last_error": state.last_error,
        "retries": state.retries,
    }


async def get_feeds(request: web.Request) -> web.Response:
    """Every feed, in short."""
    feeds = request.app[FEEDS].values()
    return _json({"feeds": [feed_document(runtime) for runtime in feeds]})


async def get_feed(request: web.Request) -> web.Response:
    """One feed: watermark, slack, hold, open runs, ledger, sinks."""
    return _json(feed_document(runtime_of(request)))


async def get_sources(request: web.Request) -> web.Response:
    """Sources by number, a page at a time."""
    runtime = runtime_of(request)
    after, limit = _number(request, "after", 0), _limit(request)
    now_ns = runtime.clock.now_ns()
    rows = [
        {
            "source": source.name,
            "newest": _time(source.newest_ns),
            "last_heard": _time(source.heard_ns),
            "silent_s": _age_s(now_ns, source.heard_ns),
            "active": source.active,
            "excused": source.excused,
        }
        for source in sources_of(runtime.feed.state, after, limit)
    ]
    known = len(runtime.feed.state.sources.names)
    following = after + len(rows)
    return _json({"sources": rows, "known": known, "next_after": following if following < known else None})


async def get_late(request: web.Request) -> web.Response:
    """Late events as they are kept, oldest first, a page at a time."""
    runtime = runtime_of(request)
    rows = await asyncio.to_thread(
        late_rows,
        runtime.folder / "lanes.db",
        after=_number(request, "after", 0),
        limit=_limit(request),
        source=request.query.get("source"),
    )
    return _json({"late": [asdict(row) for row in rows], "next_after": rows[-1].number if rows else None})


async def get_quarantine(request: web.Request) -> web.Response:
    """Lines in quarantine, oldest first, a page at a time; bytes that are no UTF-8 are shown with replacements."""
    runtime = runtime_of(request)
    rows = await asyncio.to_thread(
        quarantine_rows, runtime.folder / "lanes.db", after=_number(request, "after", 0), limit=_limit(request)
    )
    shown = [{**asdict(row), "event": row.event.decode(errors="replace")} for row in rows]
    return _json({"quarantine": shown, "next_after": rows[-1].number if rows else None})


async def get_ordered(request: web.Request) -> web.StreamResponse:
    """The ordered output as it is released, one JSON line an event, from the batch after `after` on; without end."""
    runtime = runtime_of(request)
    recent = runtime.recent
    last = runtime.feed.state.outbox.next_number["ordered"] - 1
    number = _number(request, "after", last)
    first = recent.first_number
    if number < last and (first is None or number + 1 < first):
        detail = f"batches from {first or last + 1} on are still at hand here; older ones are in the feed's sinks"
        return problem(410, "Gone", detail)
    response = web.StreamResponse(headers={"Content-Type": "application/x-ndjson", "Cache-Control": "no-store"})
    await response.prepare(request)
    while not recent.closed:
        bell = recent.bell()
        for batch in recent.after(number):
            try:
                block = await asyncio.to_thread(ordered_block, runtime, batch)
            except JournalError:
                return response  # the listener was too slow; it will be told so when it comes again
            await response.write(block)
            number = batch.number
        try:
            async with asyncio.timeout(KEEPALIVE_S):
                await bell.wait()
        except TimeoutError:
            await response.write(b"\n")  # an empty line keeps the connection alive
    return response


def ordered_block(runtime: FeedRuntime, batch: Batch) -> bytes:
    """A batch as lines {"batch":…,"position":…,"time_ns":…,"source":…,"event":…}; the event's bytes as they came."""
    return b"".join(_ordered_lines(runtime, batch))


def _ordered_lines(runtime: FeedRuntime, batch: Batch) -> Iterator[bytes]:
    names, encoded = runtime.lines.source_names(), {}
    rows = zip(batch.times.tolist(), batch.refs["source"].tolist(), runtime.lines.lines(batch), strict=True)
    for position, (time_ns, source, line) in enumerate(rows):
        if source not in encoded:
            encoded[source] = msgspec.json.encode(names[source])
        yield b'{"batch":%d,"position":%d,"time_ns":%d,"source":%b,"event":%b}\n' % (
            batch.number, position, time_ns, encoded[source], line
        )  # fmt: skip


def _number(request: web.Request, name: str, default: int) -> int:
    text = request.query.get(name)
    if text is None:
        return default
    if not (text.isascii() and text.isdigit() and len(text) <= 18):
        raise web.HTTPBadRequest(text=f"?{name}= must be a whole number, it is {text[:50]!r}")
    return int(text)


def _limit(request: web.Request) -> int:
    return min(max(_number(request, "limit", 100), 1), ROWS_AT_MOST)


async def get_live(request: web.Request) -> web.Response:
    """The process is alive and its loop turns."""
    del request
    return _json({"live": True})


async def get_ready(request: web.Request) -> web.Response:
    """Ready to take events; 503, with the causes, when a feed has failed, is stopping, or waits without advancing."""
    causes = []
    for name, runtime in request.app[FEEDS].items():
        if runtime.failure is not None:
            causes.append(f"feed {name} has stopped: {runtime.failure}")
        elif not runtime.accepting:
            causes.append(f"feed {name} is starting or stopping")
        causes += [f"feed {name}: {sentence}" for sentence in stalls_of(runtime)]
    if not causes:
        return _json({"ready": True})
    return problem(503, "Service Unavailable", "; ".join(causes), headers={"Retry-After": "5"})
