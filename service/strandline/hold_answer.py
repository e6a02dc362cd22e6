"""GET /v1/feeds/{feed}/holds and /acts: who held a feed, from when to when and why, and what operators did.

Reads only. The history is told by `core.holds`; here are the question's grammar and the documents.
"""

from __future__ import annotations

from collections.abc import Iterable
from typing import Annotated

import msgspec
from aiohttp import web

from .config_units import duration_ns
from .core.acts import ACTS_AT_MOST
from .core.columns import NO_SOURCE, TIME_MAX, TIME_MIN
from .core.holds import Held
from .core.records import ActName, ActRecord
from .core.view import HOLD_WHYS
from .hold_limits import HOLDS_AT_MOST, HOLDS_UNASKED
from .ingest.endpoint import runtime_of
from .ingest.timestamps import format_rfc3339, parse_rfc3339
from .runtime import FeedRuntime

Why = Annotated[str, msgspec.Meta(description=f"one of: {', '.join(HOLD_WHYS)}")]


class HoldRow(msgspec.Struct, kw_only=True):
    """One hold. `to` is null while it lasts; then it has lasted `for_s` seconds until now."""

    why: Why
    explanation: str
    source: str | None
    sink: str | None
    from_: str = msgspec.field(name="from")
    from_ms: float
    to: str | None
    to_ms: float | None
    for_s: float


class HoldTotal(msgspec.Struct):
    """What one holder had of the time asked about: seconds, and holds that reach into it."""

    why: Why
    source: str | None
    sink: str | None
    for_s: float
    count: int


class ShorterHolds(msgspec.Struct):
    """Holds too short to be listed: how many, and seconds of the time asked about. The totals count them too."""

    count: int
    for_s: float


class HoldsAnswer(msgspec.Struct):
    """Holds that reach into the time asked about, the newest first, and totals over all of them, the longest first.

    `known_since` is the first instant that the history tells of. Times in which nothing was held are left out.
    `shorter`: those not listed since they lasted less than ?at_least=.
    """

    holds: list[HoldRow]
    summary: list[HoldTotal]
    known_since: str | None
    shorter: ShorterHolds


class ActRow(msgspec.Struct):
    """One act. `subject` is a source or a sink, or empty; `until` and `slack_s` tell of a slack set for a time."""

    at: str
    at_ms: float
    act: ActName
    subject: str
    who: str
    reason: str
    until: str | None
    slack_s: float | None


class ActsAnswer(msgspec.Struct):
    """The last acts, the newest first."""

    acts: list[ActRow]


async def get_holds(request: web.Request) -> web.Response:
    """Who held the feed: `?from=` and `?to=` (RFC 3339) name a time, `?limit=` and `?at_least=` what is listed."""
    runtime = runtime_of(request)
    from_ns, to_ns = instant(request, "from", TIME_MIN), instant(request, "to", TIME_MAX)
    if from_ns > to_ns:
        raise web.HTTPBadRequest(text="?from= must not be later than ?to=")
    limit, at_least_ns = _limit(request, HOLDS_UNASKED, HOLDS_AT_MOST), _at_least(request)
    answer = holds_answer(runtime, from_ns, to_ns, limit, at_least_ns)
    return web.Response(body=msgspec.json.encode(answer), content_type="application/json")


async def get_acts(request: web.Request) -> web.Response:
    """What operators did, the newest first."""
    acts = runtime_of(request).feed.state.acts.newest(_limit(request, 100, ACTS_AT_MOST))
    answer = ActsAnswer([act_row(act) for act in acts])
    return web.Response(body=msgspec.json.encode(answer), content_type="application/json")


def holds_answer(runtime: FeedRuntime, from_ns: int, to_ns: int, limit: int, at_least_ns: int = 0) -> HoldsAnswer:
    """The answer for a time; of holds that lasted less than `at_least_ns`, within that time or not, only sums."""
    state, now_ns = runtime.feed.state, runtime.view().now_ns
    known = list(state.holds.history(now_ns))
    asked = [
        held
        for held in known
        if held.why != "nothing_held" and held.from_ns < to_ns and (held.to_ns is None or held.to_ns > from_ns)
    ]
    names, window = state.sources.names, (from_ns, min(to_ns, now_ns))
    listed = [held for held in asked if _end(held, now_ns) - held.from_ns >= at_least_ns]
    shorter = [held for held in asked if _end(held, now_ns) - held.from_ns < at_least_ns]
    return HoldsAnswer(
        [_row(held, names, now_ns) for held in reversed(listed[-limit:])],
        _summary(asked, names, window),
        format_rfc3339(known[0].from_ns) if known else None,
        ShorterHolds(len(shorter), sum(_within(held, window) for held in shorter) / 1e9),
    )


def _end(held: Held, now_ns: int) -> int:
    return now_ns if held.to_ns is None else held.to_ns


def _within(held: Held, window: tuple[int, int]) -> int:
    """How long it lasted within a time, whose end is not later than now."""
    return max(0, min(_end(held, window[1]), window[1]) - max(held.from_ns, window[0]))


def _row(held: Held, names: list[str], now_ns: int) -> HoldRow:
    return HoldRow(
        why=held.why,
        explanation=HOLD_WHYS[held.why],
        source=None if held.source == NO_SOURCE else names[held.source],
        sink=held.sink or None,
        from_=format_rfc3339(held.from_ns),
        from_ms=held.from_ns / 1e6,
        to=None if held.to_ns is None else format_rfc3339(held.to_ns),
        to_ms=None if held.to_ns is None else held.to_ns / 1e6,
        for_s=(_end(held, now_ns) - held.from_ns) / 1e9,
    )


def _summary(asked: Iterable[Held], names: list[str], window: tuple[int, int]) -> list[HoldTotal]:
    totals: dict[tuple[str, int, str], tuple[int, int]] = {}
    for held in asked:
        lasted_ns, count = totals.get(held[:3], (0, 0))
        totals[held[:3]] = lasted_ns + _within(held, window), count + 1
    rows = [
        HoldTotal(why, None if source == NO_SOURCE else names[source], sink or None, lasted_ns / 1e9, count)
        for (why, source, sink), (lasted_ns, count) in totals.items()
    ]
    return sorted(rows, key=lambda row: -row.for_s)


def act_row(act: ActRecord) -> ActRow:
    """One act as it is shown."""
    return ActRow(
        at=format_rfc3339(act.now_ns),
        at_ms=act.now_ns / 1e6,
        act=act.act,
        subject=act.subject,
        who=act.who,
        reason=act.reason,
        until=None if act.until_ns is None else format_rfc3339(act.until_ns),
        slack_s=None if act.slack_ns is None else act.slack_ns / 1e9,
    )


def instant(request: web.Request, name: str, default: int) -> int:
    """An instant of the query, RFC 3339, in ns. Raises HTTPBadRequest where it is none."""
    text = request.query.get(name)
    if text is None:
        return default
    try:
        return parse_rfc3339(text)
    except ValueError as error:
        detail = f"?{name}= must be a time of RFC 3339 such as 2026-05-01T03:00:00Z (a + is written %2B): {error}"
        raise web.HTTPBadRequest(text=detail[:300]) from None


def _at_least(request: web.Request) -> int:
    text = request.query.get("at_least", "0s")
    try:
        return duration_ns(text)
    except ValueError as error:
        raise web.HTTPBadRequest(text=f"?at_least={text[:50]!r} {error}"[:300]) from None


def _limit(request: web.Request, default: int, at_most: int) -> int:
    text = request.query.get("limit")
    if text is None:
        return default
    if not (text.isascii() and text.isdigit() and len(text) <= 18):
        raise web.HTTPBadRequest(text=f"?limit= must be a whole number, it is {text[:50]!r}")
    return min(max(int(text), 1), at_most)
