"""What can be seen over HTTP: feeds, sources, lanes, the ordered output, health. Reads only; changes nothing.

What a feed looks like is written in `documents`.
"""

from __future__ import annotations

import asyncio
from collections.abc import Iterator
from dataclasses import asdict, replace

import msgspec
import numpy as np
from aiohttp import web

from .access_gate import may_read
from .cluster.http import CLUSTER, cluster_causes
from .core.columns import Batch
from .core.view import sources_of
from .documents import age_s, feed_document, own_slack, stalls_of, time_text
from .errors import JournalError
from .ingest.endpoint import FEEDS, runtime_of
from .ingest.formats import NDJSON
from .problems import problem
from .replay.recording import SECONDS_AT_MOST, Recording
from .runtime import FeedRuntime
from .sinks.lanes import late_rows, quarantine_rows, refused_rows

ROWS_AT_MOST = 1000
KEEPALIVE_S = 15.0
WRITE_WITHIN_S = 30.0  # a listener that takes nothing for so long is let go
CAPTURE_TYPE = "application/octet-stream"
PIECE_BYTES = 1 << 20  # of a batch in memory for one listener, before and beside what its connection holds


def _json(value: object, status: int = 200) -> web.Response:
    return web.Response(status=status, body=msgspec.json.encode(value), content_type="application/json")


async def get_feeds(request: web.Request) -> web.Response:
    """Every feed that is at work here, in short; and whether there is a cluster to ask for."""
    shown = [runtime for name, runtime in request.app[FEEDS].items() if may_read(request, name)]
    return _json({"feeds": [feed_document(runtime) for runtime in shown], "cluster": CLUSTER in request.app})


async def get_feed(request: web.Request) -> web.Response:
    """One feed: watermark, slack, hold, open runs, ledger, sinks."""
    return _json(feed_document(runtime_of(request)))


async def get_sources(request: web.Request) -> web.Response:
    """Sources by number, a page at a time."""
    runtime = runtime_of(request)
    after, limit = _number(request, "after", 0), _limit(request)
    now_ns, own = runtime.clock.now_ns(), runtime.feed.state.own is not None
    rows = [
        {
            "source": source.name,
            "newest": time_text(source.newest_ns),
            "last_heard": time_text(source.heard_ns),
            "silent_s": age_s(now_ns, source.heard_ns),
            "active": source.active,
            "excused": source.excused,
            "promised": time_text(source.promised_ns),
            "promises_broken": source.promises_broken,
            **({"watermark": time_text(source.watermark_ns)} if own else {}),
            **own_slack(source),
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
        runtime.lanes_file,
        after=_number(request, "after", 0),
        limit=_limit(request),
        source=request.query.get("source"),
    )
    shown = [
        asdict(row)
        | {"time": time_text(row.time_ns), "arrived": time_text(row.arrived_ns), "late_by_s": row.late_by_ns / 1e9}
        for row in rows
    ]
    return _json({"late": shown, "next_after": rows[-1].number if rows else None})


async def get_quarantine(request: web.Request) -> web.Response:
    """Lines in quarantine, oldest first, a page at a time; bytes that are no UTF-8 are shown with replacements."""
    runtime = runtime_of(request)
    rows = await asyncio.to_thread(
        quarantine_rows, runtime.lanes_file, after=_number(request, "after", 0), limit=_limit(request)
    )
    shown = [
        {**asdict(row), "arrived": time_text(row.arrived_ns), "event": row.event.decode(errors="replace")}
        for row in rows
    ]
    return _json({"quarantine": shown, "next_after": rows[-1].number if rows else None})


async def get_refused(request: web.Request) -> web.Response:
    """Events of batches that sinks refused for good, oldest first, a page at a time; why stands in `detail`."""
    runtime = runtime_of(request)
    rows = await asyncio.to_thread(
        refused_rows,
        runtime.lanes_file,
        after=_number(request, "after", 0),
        limit=_limit(request),
        sink=request.query.get("sink"),
    )
    shown = [{**asdict(row), "event": row.event.decode(errors="replace")} for row in rows]
    return _json({"refused": shown, "next_after": rows[-1].number if rows else None})


async def get_ordered(request: web.Request) -> web.StreamResponse:
    """The ordered output as it is released, one JSON line an event, from the batch after `after` on; without end."""
    runtime = runtime_of(request)
    recent, last = runtime.recent, runtime.feed.state.outbox.next_number["ordered"] - 1
    number = _number(request, "after", recent.reached)
    if number > last:
        raise web.HTTPBadRequest(text=f"?after={number} names a batch that was never released; the last one is {last}")
    if not recent.holds_all_after(number):
        detail = f"batches from {recent.first_number} on are still at hand here; older ones are in the feed's sinks"
        return problem(410, "Gone", detail)
    response = web.StreamResponse(headers={"Content-Type": NDJSON, "Cache-Control": "no-store"})
    await response.prepare(request)
    try:
        await _listen(runtime, response, number)
    except (ConnectionError, TimeoutError):  # gone, or takes nothing any more
        if request.transport is not None:
            request.transport.abort()
    return response


async def get_capture(request: web.Request) -> web.StreamResponse:
    """A capture of what the feed takes in from now on, for `seconds`; one at a time for each feed."""
    runtime = runtime_of(request)
    seconds = _number(request, "seconds", 60)
    if not 1 <= seconds <= SECONDS_AT_MOST:
        raise web.HTTPBadRequest(text=f"?seconds={seconds} must be 1 to {SECONDS_AT_MOST}")
    if not runtime.accepting:
        return problem(503, "Service Unavailable", "the feed is starting or stopping", headers={"Retry-After": "5"})
    if runtime.recording:
        detail = f"feed {runtime.config.name} is being recorded already; one capture at a time is made of a feed"
        return problem(429, "Too Many Requests", detail, headers={"Retry-After": "60"})
    runtime.recording = True
    response = web.StreamResponse(headers={"Content-Type": CAPTURE_TYPE, "Cache-Control": "no-store"})
    try:
        recording = Recording(runtime, seconds=seconds, lines=_number(request, "events", 1) != 0)
        await response.prepare(request)
        async for piece in recording.pieces():
            await _write(response, piece)
    except (OSError, JournalError):  # it, or the feed, is gone, or it is too slow: the file ends without an index
        if request.transport is not None:
            request.transport.abort()
    finally:
        runtime.recording = False
    return response


async def _listen(runtime: FeedRuntime, response: web.StreamResponse, number: int) -> None:
    """Write batches as they come. Ends with the service, or where the listener was too slow: it is told when it comes
    again. Raises TimeoutError, ConnectionError."""
    recent = runtime.recent
    while True:
        bell = recent.bell()
        for batch in recent.after(number) if recent.holds_all_after(number) else ():
            first = 0
            for piece in pieces_of(batch):
                try:
                    block = await asyncio.to_thread(ordered_block, runtime, piece, first)
                except (JournalError, OSError):  # a partition that went may be read from a disk no more
                    return
                await _write(response, block)
                first += len(piece)
            number = batch.number
        if recent.closed or not recent.holds_all_after(number):
            return
        try:
            async with asyncio.timeout(KEEPALIVE_S):
                await bell.wait()
        except TimeoutError:
            await _write(response, b"\n")  # an empty line keeps the connection alive


async def _write(response: web.StreamResponse, block: bytes) -> None:
    async with asyncio.timeout(WRITE_WITHIN_S):
        await response.write(block)


def pieces_of(batch: Batch) -> Iterator[Batch]:
    """The batch in pieces of at most PIECE_BYTES of lines, or of one event."""
    ends = np.cumsum(batch.refs["length"].astype(np.int64) + 1)
    start = 0
    while start < len(batch):
        reach = (int(ends[start - 1]) if start else 0) + PIECE_BYTES
        stop = max(start + 1, int(np.searchsorted(ends, reach, side="right")))
        yield replace(batch, times=batch.times[start:stop], refs=batch.refs[start:stop])
        start = stop


def ordered_block(runtime: FeedRuntime, batch: Batch, first: int = 0) -> bytes:
    """Lines {"batch":…,"position":…,"time_ns":…,"source":…,"event":…}; the event's bytes as they came.

    `first` is the position of the piece's first event in its batch.
    """
    return b"".join(_ordered_lines(runtime, batch, first))


def _ordered_lines(runtime: FeedRuntime, batch: Batch, first: int) -> Iterator[bytes]:
    names, encoded = runtime.lines.source_names(), {}
    rows = zip(batch.times.tolist(), batch.refs["source"].tolist(), runtime.lines.lines(batch), strict=True)
    for position, (time_ns, source, line) in enumerate(rows, first):
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
    """Ready to take events; 503, with the causes, when a feed has failed, is stopping, or waits without advancing.

    In a cluster also while this instance has not joined it, or has been away for longer than its lease.
    """
    causes, untold = cluster_causes(request)
    for name, runtime in request.app[FEEDS].items():
        found = [f"feed {name}: {sentence}" for sentence in stalls_of(runtime, runtime.view(), runtime.hops())]
        if runtime.failure is not None:
            found.insert(0, f"feed {name} has stopped: {runtime.failure}")
        elif not runtime.accepting:
            found.insert(0, f"feed {name} is starting or stopping")
        if may_read(request, name):
            causes += found
        else:
            untold = untold or bool(found)
    if not causes and not untold:
        return _json({"ready": True})
    if untold:
        causes.append("the causes are told to those who show a token that may read the feed")
    return problem(503, "Service Unavailable", "; ".join(causes), headers={"Retry-After": "5"})
