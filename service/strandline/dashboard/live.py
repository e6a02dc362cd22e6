"""The dashboard's addresses for data: live moments of a feed as a stream of events, its history, and who computes them.

A moment is computed at most twice a second for a feed, however many browsers watch it, and not at all while nobody
does. A browser that is slow skips moments: no more than one waits for it here. Documents are made in `moments`,
`sampling` and `history_document`; streams are of the HTML standard's section 9.2 (server-sent events).

Measured with 2,000 sources, 12,000 events held, 20 lanes: a moment takes 0.7 ms (1.2 ms with 200,000 held), a sample
0.24 ms, one of an idle feed 0.07 ms. In a process over 40 s each (to 0.03 %) it took 0.20 % of a core without a
browser, 0.55 % with one and 0.65 % with nine. Samples are 0.03 % of that, watched or not.
"""

from __future__ import annotations

import asyncio
import contextlib
import logging
import socket
from collections import Counter
from collections.abc import AsyncIterator, Mapping
from typing import NamedTuple

import msgspec
from aiohttp import web

from ..bell import Bell
from ..core.view import View
from ..documents import stalls_of, state_of, steering_document
from ..hold_answer import act_row, holds_answer
from ..ingest.endpoint import FEEDS, runtime_of
from ..problems import problem
from ..runtime import FeedRuntime
from .history_document import POINTS, POINTS_AT_MOST, history_document
from .lanes import Part, Search, choose
from .lateness import EDGES_S, SinceLast, every_slack
from .moments import LATE_AT_MOST, STRANDS_AT_MOST, Json, feed_part, intake_part, lanes_part, rest_part
from .sampling import FeedMemory
from .serving import FILES, read_files
from .serving import routes as file_routes
from .silence import silence_of
from .strands import Look, held_of, look_into

log = logging.getLogger(__name__)
EVERY_S = 0.5
SAMPLE_EVERY_S = 1.0
TURN_S = 0.001  # so long at a time; a turn of the loop after each feed would cost as much as sampling one that rests
STREAMS_AT_MOST = 16  # of a feed
WRITE_WITHIN_S = 15.0  # a browser that takes nothing for so long is let go
SEND_BUFFER_BYTES = 64 * 1024  # of the system for one stream: what waits there is old when the browser reads it
LANES, LANES_AT_MOST = 20, 100
SEARCH_AT_MOST = 256  # characters
MS_AT_MOST = 9_223_372_036_854  # the end of int64 nanoseconds
ACTS_AT_MOST, HOLDS_AT_MOST = 20, 500


class Variant(NamedTuple):
    """What one browser asked to see."""

    search: str
    lanes: int


class Moment(NamedTuple):
    """A feed at one instant, as far as it is the same for everybody."""

    view: View
    document: Json
    part: Part
    look: Look


class Watch:
    """One feed and those who watch it. Its frames are computed by one task that lives while anybody watches."""

    def __init__(self, runtime: FeedRuntime) -> None:
        self.runtime, self.memory = runtime, FeedMemory(runtime)
        self.variants: Counter[Variant] = Counter()
        self.computed = 0  # moments since the start
        self.closed = False
        self.gone = False  # the feed is not at work here any more: a partition that another instance owns, or nobody
        self._frames: dict[Variant, bytes] = {}
        self._searches: dict[Variant, Search] = {}
        self._shown: dict[Variant, list[int]] = {}
        self._bell = Bell()
        self._task: asyncio.Task[None] | None = None

    # ---- who watches ------------------------------------------------------------------------------------------------

    @property
    def streams(self) -> int:
        """How many watch."""
        return self.variants.total()

    def join(self, variant: Variant) -> None:
        """One more watches."""
        self.variants[variant] += 1
        if variant.search and variant not in self._searches:
            self._searches[variant] = Search(variant.search, LANES_AT_MOST)
        if self._task is None:
            self._task = asyncio.create_task(self._run())

    def leave(self, variant: Variant) -> None:
        """One watches no more."""
        self.variants[variant] -= 1
        if not self.variants[variant]:
            del self.variants[variant]
            for of_variant in (self._frames, self._searches, self._shown):
                of_variant.pop(variant, None)
        if not self.variants and self._task is not None:
            self._task.cancel()
            self._task = None

    def bell(self) -> asyncio.Event:
        """Set when the next moment is there, or none will come. Take it before looking, wait on it after."""
        return self._bell.next

    def frame(self, variant: Variant) -> bytes | None:
        """The newest moment for a variant; None before its first."""
        return self._frames.get(variant)

    def close(self) -> None:
        """Let everyone who watches go home."""
        self.closed = True
        self._bell.ring()

    # ---- moments ----------------------------------------------------------------------------------------------------

    async def _run(self) -> None:
        loop = asyncio.get_running_loop()
        lateness = SinceLast(self.runtime.feed.state.lateness)
        while not self.closed:
            due = loop.time() + EVERY_S
            try:
                self.compute(lateness)
            except Exception:  # the feed goes on, and so do the streams: the next moment may be well
                log.exception("%s: an unforeseen error while computing a moment", self.runtime.config.name)
            self._bell.ring()
            await asyncio.sleep(due - loop.time())

    def compute(self, lateness: SinceLast) -> None:
        """Make the frames of this instant for every variant that is watched."""
        moment = self._moment(lateness)
        for variant in self.variants:
            document = {**moment.document, **self._lanes(moment, variant)}
            data = msgspec.json.encode(document)
            self._frames[variant] = b"event: moment\nid: %d\ndata: %b\n\n" % (document["now_ms"], data)
        self.computed += 1

    def _moment(self, lateness: SinceLast) -> Moment:
        runtime, memory = self.runtime, self.memory
        view, hops, state = runtime.view(), runtime.hops(), runtime.feed.state
        memory.note_counters(view.now_ns, hops)
        rates = memory.rates(view.now_ns, hops)
        stalls = stalls_of(runtime, view, hops)
        document = feed_part(view, rates, hops, [delivery.state() for delivery in runtime.deliveries.values()])
        document |= {
            "intakes": [intake_part(counts, view.now_ns) for counts in runtime.intakes],
            "state": state_of(runtime, stalls),
            "stalls": stalls,
            "failure": runtime.failure,
            "idle_after_s": state.settings.idle_after_ns / 1e9,
            "hold_at_most_s": state.settings.hold_at_most_ns / 1e9,
            "steering": steering_document(view),
            "lateness": {"edges_s": EDGES_S, "counts": lateness.take().tolist()},
            "slacks": every_slack(state.lateness, view.slack_ns, rates.hold_mean_ns),
            "acts": [act_row(act) for act in state.acts.newest(ACTS_AT_MOST)],
            "silence": silence_of(state.sources, view.now_ns),
            "minute": memory.minute(view.now_ns),
        }
        idle_after_ns = state.settings.idle_after_ns
        part = Part(state.sources, view.hold.source, memory.late.sources(), view.now_ns, idle_after_ns)
        return Moment(view, document, part, look_into(state.runs))

    def _lanes(self, moment: Moment, variant: Variant) -> Json:
        sources = self.runtime.feed.state.sources
        holder = moment.view.hold.source
        found = self._searches[variant].go_on(sources.names) if variant.search else []
        chosen = choose(moment.part, holder, variant.lanes, found, self._shown.get(variant, ()))
        self._shown[variant] = chosen
        held = held_of(moment.look, chosen, len(sources.names), STRANDS_AT_MOST)
        late = self.memory.late.rows(chosen, LATE_AT_MOST)
        lanes = lanes_part(sources, moment.part, chosen, held, late, self.runtime.feed.state.own)
        if variant.search:
            matched = set(found)
            for lane, number in zip(lanes, chosen, strict=True):
                lane["found"] = number in matched
        return {"lanes": lanes, "rest": rest_part(moment.view, moment.part, lanes), "sampled": moment.look.sampled}


class Watches:
    """The watch of each feed that is at work: partitions come and go while the service runs."""

    def __init__(self, feeds: Mapping[str, FeedRuntime]) -> None:
        self._feeds, self._watches = feeds, dict[str, Watch]()
        self.follow()

    def __getitem__(self, feed: str) -> Watch:
        """By name. Raises KeyError where the feed is not at work."""
        return self.of(self._feeds[feed])

    def of(self, runtime: FeedRuntime) -> Watch:
        """The watch of a feed that is at work now."""
        watch = self._watches.get(runtime.config.name)
        if watch is None or watch.runtime is not runtime:
            if watch is not None:
                watch.close()
            watch = self._watches[runtime.config.name] = Watch(runtime)
        return watch

    def follow(self) -> None:
        """Take up what has come. Let those go home who watch what is gone, and drop what was remembered of it."""
        for name, watch in list(self._watches.items()):
            if self._feeds.get(name) is not watch.runtime:
                watch.gone = True
                watch.close()
                del self._watches[name]
        for runtime in list(self._feeds.values()):
            self.of(runtime)

    def all(self) -> list[Watch]:
        """As they are now."""
        return list(self._watches.values())

    def close(self) -> None:
        """Let everyone go home."""
        for watch in self._watches.values():
            watch.close()


WATCHES = web.AppKey("dashboard_watches", Watches)


# ---- addresses -------------------------------------------------------------------------------------------------------


async def get_live(request: web.Request) -> web.StreamResponse:
    """Moments of a feed as they are computed, without end."""
    watch = request.app[WATCHES].of(runtime_of(request))
    variant = Variant(_search(request), whole(request, "lanes", LANES, 1, LANES_AT_MOST))
    if watch.streams >= STREAMS_AT_MOST:
        detail = f"{STREAMS_AT_MOST} streams watch this feed already: close a page that is not looked at"
        return problem(429, "Too Many Requests", detail, headers={"Retry-After": "10"})
    response = web.StreamResponse(headers={"Content-Type": "text/event-stream", "Cache-Control": "no-store"})
    watch.join(variant)
    try:
        await response.prepare(request)
        await _follow(request, response, watch, variant)
    except (ConnectionError, TimeoutError):  # gone, or takes nothing any more
        if request.transport is not None:
            request.transport.abort()
    finally:
        watch.leave(variant)
    return response


async def _follow(request: web.Request, response: web.StreamResponse, watch: Watch, variant: Variant) -> None:
    """Write each moment that the browser has room for. Raises TimeoutError, ConnectionError."""
    transport = request.transport
    if transport is None:
        return
    wire = transport.get_extra_info("socket")
    if wire is not None:
        wire.setsockopt(socket.SOL_SOCKET, socket.SO_SNDBUF, SEND_BUFFER_BYTES)
    await _write(response, b"retry: 1000\n\n")
    loop = asyncio.get_running_loop()
    taken, sent = loop.time(), None
    while not watch.closed:
        bell, frame = watch.bell(), watch.frame(variant)
        if transport.get_write_buffer_size():
            if loop.time() - taken > WRITE_WITHIN_S:
                raise TimeoutError
        else:
            taken = loop.time()
            if frame is not None and frame is not sent:
                await _write(response, frame)
                sent = frame
        await bell.wait()
    if watch.gone:
        await _write(response, b"event: gone\ndata: {}\n\n")


async def _write(response: web.StreamResponse, block: bytes) -> None:
    async with asyncio.timeout(WRITE_WITHIN_S):
        await response.write(block)


async def get_history(request: web.Request) -> web.Response:
    """The last hours of a feed as columns."""
    runtime = runtime_of(request)
    watch = request.app[WATCHES].of(runtime)
    now_ms = runtime.clock.now_ns() // 1_000_000
    to_ms = whole(request, "to_ms", now_ms, 0, MS_AT_MOST)
    from_ms = whole(request, "from_ms", max(0, to_ms - 900_000), 0, MS_AT_MOST)
    points = whole(request, "points", POINTS, 2, POINTS_AT_MOST)
    if from_ms > to_ms:
        raise web.HTTPBadRequest(text=f"?from_ms={from_ms} lies behind ?to_ms={to_ms}")
    step_s, rows = watch.memory.history.window(from_ms * 1_000_000, to_ms * 1_000_000, points)
    state, begin_ns, end_ns = runtime.feed.state, from_ms * 1_000_000, (to_ms + 1) * 1_000_000
    more: Json = {
        "acts": [act_row(act) for act in reversed(state.acts.kept) if begin_ns <= act.now_ns < end_ns],
        "holds": holds_answer(runtime, begin_ns, end_ns, HOLDS_AT_MOST).holds,
    }
    names = state.sources.names
    body = await asyncio.to_thread(lambda: msgspec.json.encode(history_document(step_s, rows, names) | more))
    return web.Response(body=body, content_type="application/json")


def whole(request: web.Request, name: str, default: int, least: int, greatest: int) -> int:
    """A whole number of the query. Raises HTTPBadRequest where it is none or out of bounds."""
    text = request.query.get(name)
    if text is None:
        return default
    if not (text.isascii() and text.isdigit() and len(text) <= 18 and least <= int(text) <= greatest):
        raise web.HTTPBadRequest(text=f"?{name}= must be a whole number, {least} to {greatest}, not {text[:50]!r}")
    return int(text)


def _search(request: web.Request) -> str:
    text = request.query.get("q", "")
    if len(text) > SEARCH_AT_MOST:
        raise web.HTTPBadRequest(text=f"?q= may have {SEARCH_AT_MOST} characters, not {len(text):,}")
    return text


# ---- start and stop --------------------------------------------------------------------------------------------------


def install(app: web.Application) -> None:
    """Add the dashboard to an application whose feeds are known: its addresses, and what samples the feeds."""
    app[FILES] = read_files()
    feeds = app[FEEDS]
    app[WATCHES] = Watches(feeds)
    app.add_routes(
        [
            web.get("/v1/feeds/{feed}/live", get_live, allow_head=False),
            web.get("/v1/feeds/{feed}/history", get_history),
            *file_routes(),
        ]
    )
    app.cleanup_ctx.append(_sampling)
    app.on_shutdown.append(_close)


async def _close(app: web.Application) -> None:
    app[WATCHES].close()


async def _sampling(app: web.Application) -> AsyncIterator[None]:
    task = asyncio.create_task(_sample(app[WATCHES]))
    yield
    task.cancel()
    with contextlib.suppress(asyncio.CancelledError):
        await task


async def _sample(watches: Watches) -> None:
    loop = asyncio.get_running_loop()
    while True:
        begun = loop.time()
        due = begun + SAMPLE_EVERY_S
        try:
            watches.follow()
        except Exception:  # what is seen must not stop what is done
            log.exception("an unforeseen error while feeds came or went")
        for watch in watches.all():
            try:
                watch.memory.sample()
            except Exception:  # likewise
                log.exception("%s: an unforeseen error in a sample", watch.runtime.config.name)
            if loop.time() - begun > TURN_S:
                await asyncio.sleep(0)  # others have their turn
                begun = loop.time()
        await asyncio.sleep(due - loop.time())
