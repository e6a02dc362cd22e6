"""What can be seen over HTTP: feeds, sources, lanes, the ordered output, health. Reads only; changes nothing.

What a feed looks like is written in `documents`.
"""

from __future__ import annotations

import asyncio
from collections.abc import Iterator
from dataclasses import asdict

import msgspec
from aiohttp import web

from .core.columns import Batch
from .core.view import sources_of
from .documents import age_s, feed_document, stalls_of, time_text
from .errors import JournalError
from .ingest.endpoint import FEEDS, runtime_of
from .problems import problem
from .runtime import FeedRuntime
from .sinks.lanes import late_rows, quarantine_rows

ROWS_AT_MOST = 1000
KEEPALIVE_S = 15.0


def _json(value: object, status: int = 200) -> web.Response:
    return web.Response(status=status, body=msgspec.json.encode(value), content_type="application/json")


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
            "newest": time_text(source.newest_ns),
            "last_heard": time_text(source.heard_ns),
            "silent_s": age_s(now_ns, source.heard_ns),
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
