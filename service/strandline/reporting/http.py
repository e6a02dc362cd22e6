"""GET /v1/feeds/{feed}/report: the question's grammar and the answer; the work is done elsewhere, in a thread."""

from __future__ import annotations

import asyncio

import msgspec
from aiohttp import web

from ..dashboard.live import WATCHES
from ..hold_answer import instant
from ..ingest.endpoint import runtime_of
from ..page_style import POLICY
from .facts import Facts
from .gathering import facts_of, look
from .html import report_html
from .markdown import report_markdown

DAY_NS = 86_400 * 1_000_000_000
SPAN_NS_AT_MOST = 31 * DAY_NS
SPAN_NS = 3_600 * 1_000_000_000
AT_ONE_TIME = 2  # reports in work; others wait for their turn
TURNS = web.AppKey("report_turns", asyncio.Semaphore)
FORMATS = ("html", "markdown", "json")
HEADERS = {
    "Content-Security-Policy": f"{POLICY}; frame-ancestors 'none'",
    "X-Content-Type-Options": "nosniff",
    "Referrer-Policy": "no-referrer",
    "Cache-Control": "no-store",
}


def install(app: web.Application) -> None:
    """Add the address to an application that has the dashboard."""
    app[TURNS] = asyncio.Semaphore(AT_ONE_TIME)
    app.add_routes([web.get("/v1/feeds/{feed}/report", get_report)])


async def get_report(request: web.Request) -> web.Response:
    """What happened from `?from=` to `?to=` (the last hour), as `?format=` html, markdown or json."""
    runtime = runtime_of(request)
    form = request.query.get("format", "html")
    if form not in FORMATS:
        raise web.HTTPBadRequest(text=f"?format= must be one of {', '.join(FORMATS)}, it is {form[:50]!a}")
    from_ns, to_ns = _time(request, runtime.clock.now_ns())
    memory = request.app[WATCHES].of(runtime).memory  # before waiting: a partition may go meanwhile
    async with request.app[TURNS]:
        seen = look(memory, from_ns, to_ns)
        body, media_type = await asyncio.to_thread(lambda: written(facts_of(seen), form))
    return web.Response(body=body, content_type=media_type, charset="utf-8", headers=HEADERS)


def written(facts: Facts, form: str) -> tuple[bytes, str]:
    """A report's bytes and their media type."""
    match form:
        case "html":
            return report_html(facts).encode(), "text/html"
        case "markdown":
            return report_markdown(facts).encode(), "text/markdown"  # RFC 7763
        case _:
            return msgspec.json.encode(facts), "application/json"


def _time(request: web.Request, now_ns: int) -> tuple[int, int]:
    to_ns = min(instant(request, "to", now_ns), now_ns)
    from_ns = instant(request, "from", to_ns - SPAN_NS)
    if from_ns >= to_ns:
        raise web.HTTPBadRequest(text="?from= must be earlier than ?to= and than now: there is nothing to report yet")
    if to_ns - from_ns > SPAN_NS_AT_MOST:
        raise web.HTTPBadRequest(text="a report is of 31 days at most: ask for a shorter time with ?from= and ?to=")
    return from_ns, to_ns
