"""GET /v1/feeds/{feed}/trace: the question over HTTP. One trace of a feed at a time, in a thread beside the loop.

The thread holds the interpreter for a moment at a time only (`budget`), ends where the client has gone, and reads no
more than a limit.
"""

from __future__ import annotations

import asyncio
from concurrent.futures import Future, ThreadPoolExecutor
from functools import partial
from threading import Event

import msgspec
from aiohttp import web

from ..ingest.endpoint import runtime_of
from ..problems import problem
from ..runtime import FeedRuntime
from .answer import document_of
from .budget import Abandoned, Budget
from .following import Standing
from .question import LineReader, Question, QuestionError, question_of
from .trace import READ_BYTES_AT_MOST, trace

ASKED = ("id", "time", "source")
RETRY_AFTER_S = 5


class Traces:
    """The traces of one service: at most one at a time works, and one of each feed is asked for."""

    def __init__(self, bytes_at_most: int = READ_BYTES_AT_MOST) -> None:
        self.bytes_at_most = bytes_at_most
        self.busy: set[str] = set()
        self._thread = ThreadPoolExecutor(1, "trace")
        self._closed = Event()

    async def answer(self, runtime: FeedRuntime, question: Question) -> bytes:
        """The answer as JSON. Raises StrandlineError, OSError; ends the work where it is cancelled."""
        gone = Event()
        standing = _standing(runtime)
        budget = Budget(self.bytes_at_most, lambda: gone.is_set() or self._closed.is_set())
        work = partial(_answered, runtime, question, budget, standing)
        self.busy.add(question.feed)
        future = self._thread.submit(work)
        loop = asyncio.get_running_loop()

        def freed(done: Future[bytes]) -> None:
            del done
            if not loop.is_closed():
                loop.call_soon_threadsafe(self.busy.discard, question.feed)

        future.add_done_callback(freed)
        try:
            return await asyncio.wrap_future(future)
        finally:
            gone.set()

    def close(self) -> None:
        """Take no more work, and end what is going on."""
        self._closed.set()
        self._thread.shutdown(wait=False, cancel_futures=True)


TRACES = web.AppKey("traces", Traces)


async def close_traces(app: web.Application) -> None:
    """At the end of the application."""
    app[TRACES].close()


async def get_trace(request: web.Request) -> web.Response:
    """Where an event is now, and why."""
    runtime, traces = runtime_of(request), request.app[TRACES]
    question = _question(request, runtime)
    if not runtime.accepting and runtime.failure is None:
        return problem(503, "Service Unavailable", "the feed is starting or stopping", headers={"Retry-After": "5"})
    if question.feed in traces.busy:
        detail = f"another event of feed {question.feed} is being traced; one trace at a time is made of a feed"
        return problem(429, "Too Many Requests", detail, headers={"Retry-After": str(RETRY_AFTER_S)})
    try:
        body = await traces.answer(runtime, question)
    except Abandoned:
        return problem(503, "Service Unavailable", "the service is stopping", headers={"Retry-After": "5"})
    except OSError:
        if runtime.accepting:
            raise
        detail = f"feed {question.feed} has gone from this instance meanwhile, and its journal with it"
        return problem(503, "Service Unavailable", detail, headers={"Retry-After": "5"})
    return web.Response(body=body, content_type="application/json")


def _question(request: web.Request, runtime: FeedRuntime) -> Question:
    id, time, source = (request.query.get(name) for name in ASKED)
    try:
        config = runtime.config
        partition = config.partitions is not None
        return question_of(config.name, LineReader.of(config), id, time, source, partition=partition)
    except QuestionError as error:
        raise web.HTTPBadRequest(text=f"?id=, ?time= and ?source=: {error}") from None


def _standing(runtime: FeedRuntime) -> Standing:
    positions = {sink: dict(lanes) for sink, lanes in runtime.feed.state.outbox.positions.items()}
    return Standing(tuple(runtime.lines.source_names()), positions, runtime.clock.now_ns())


def _answered(runtime: FeedRuntime, question: Question, budget: Budget, standing: Standing) -> bytes:
    found = trace(runtime.journal, question, runtime.lanes_file, budget, standing)
    return msgspec.json.encode(document_of(found))
