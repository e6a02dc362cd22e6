"""GET /v1/feeds/{feed}/slack: how long to wait, answered from live traffic. Reads only; nothing is chosen here.

What it says is worked out in `core.slacks`; here are the question's grammar and the document.
"""

from __future__ import annotations

from typing import Any

import msgspec
from aiohttp import web

from .config_units import duration_ns
from .core.slacks import SlackShare, SlacksView, slacks_of
from .documents import steering_document, time_text
from .ingest.endpoint import runtime_of
from .runtime import FeedRuntime

SLACKS_AT_MOST = 100
# 1-2-5 steps from 1 ms to 5,000 s, and no slack at all.
GRID_NS = (0, *(step * 10**power for power in range(6, 13) for step in (1, 2, 5)))
BASIS = {
    "arrival": "the arrival clock: lateness is the time from the event to its arrival",
    "event": "the least of the newest event times of the sources waited for: lateness is how far behind it an event is",
}
# What of the answer is exact, in words for a person; deploy/advice.md says more.
EXACT = (
    "late_share_since_begin is counted event by event. The shares of the slacks are those of the events remembered, "
    "judged at their arrival against what the watermark follows; they lie between late_share_at_least and "
    "late_share_at_most, which differ by the events of one bucket of the sketch (2 % of the slack wide) and are equal "
    "where the slack is a bucket's bound. Quantiles of lateness are within the relative error from 1 us to 366 days; a "
    "shorter lateness counts as none. Not foreseen: what hold_at_most, excuses and promises would do with another "
    "slack; they only make events later, as do the steps in which a watermark moves less often than its basis. "
    "Older events fade: at the first arrival of each hour all weigh half, if more than 100,000 are remembered."
)


async def get_slack(request: web.Request) -> web.Response:
    """What each slack would give: `?at=3.2s,5s` names some, else a grid is answered."""
    document = slack_document(runtime_of(request), asked_for(request.query.get("at")))
    return web.Response(body=msgspec.json.encode(document), content_type="application/json")


def asked_for(text: str | None) -> tuple[int, ...]:
    """The slacks that a question names, in ns. Raises HTTPBadRequest."""
    if text is None:
        return GRID_NS
    parts = text.split(",")
    if len(parts) > SLACKS_AT_MOST:
        raise web.HTTPBadRequest(text=f"?at= may name {SLACKS_AT_MOST} slacks, not {len(parts):,}")
    try:
        return tuple(duration_ns(part.strip()) for part in parts)
    except ValueError as error:
        raise web.HTTPBadRequest(text=f"?at= must name slacks such as 3.2s,5s: {str(error)[:200]}") from None


def slack_document(runtime: FeedRuntime, slacks_ns: tuple[int, ...]) -> dict[str, Any]:
    """The answer; shares of late events between 0 and 1, times in seconds."""
    found, view = slacks_of(runtime.feed.state, slacks_ns), runtime.view()
    return {
        "feed": view.name,
        "clock": view.clock,
        "lateness_is_behind": BASIS[view.clock],
        "slack_s": view.slack_ns / 1e9,
        "late_share_since_begin": found.late / found.judged if found.judged else None,
        "events_since_begin": found.judged,
        "events_remembered": round(found.weight, 1),
        "remembered_since": time_text(found.since_ns),
        "faded_times": found.fades,
        "relative_error": found.relative_error,
        "slacks": [_slack(share, found) for share in found.slacks],
        "lateness": _lateness(found),
        "steering": steering_document(view),
        "exact": EXACT,
    }


def _slack(share: SlackShare, found: SlacksView) -> dict[str, Any]:
    known = found.weight > 0
    return {
        "slack_s": share.slack_ns / 1e9,
        "late_share_at_least": share.at_least if known else None,
        "late_share_at_most": share.at_most if known else None,
        "in_force": share.in_force,
    }


def _lateness(found: SlacksView) -> dict[str, float | None]:
    known = found.weight > 0
    rows = {f"p{100 * q:g}_s": ns / 1e9 if known else None for q, ns in found.lateness_quantiles_ns.items()}
    return {**rows, "greatest_s": found.greatest_ns / 1e9 if known else None}
