"""Operators' acts over HTTP: excuse a source, release now, set the slack for a time, pause and resume a sink.

Each is answered once its record, with who and why, is durable. What an act does is decided by the core; here are the
bodies, who it was, and the limits of what may be asked for.
"""

from __future__ import annotations

from typing import Annotated

import msgspec
from aiohttp import web

from .access_gate import WHO
from .config_units import duration_ns, duration_text
from .core.acts import UNKNOWN
from .core.settings import SECOND_NS
from .errors import BodyError
from .ingest.endpoint import read_act, runtime_of
from .problems import NotThere
from .runtime import FeedRuntime
from .sinks_of import LANE_STORE

REASON_CHARACTERS_AT_MOST = 1_000
WHO_CHARACTERS_AT_MOST = 100
SLACK_FOR_AT_MOST_NS = 24 * 3600 * SECOND_NS

Who = Annotated[str, msgspec.Meta(max_length=WHO_CHARACTERS_AT_MOST, description="who does it; a token's name wins")]
Reason = Annotated[str, msgspec.Meta(min_length=1, max_length=REASON_CHARACTERS_AT_MOST, description="why")]


class Excuse(msgspec.Struct, forbid_unknown_fields=True):
    """Do not wait for `source` until it speaks again; who and why are kept with the act, where they are said."""

    source: str
    reason: str = ""
    who: Who = ""


class Drain(msgspec.Struct, forbid_unknown_fields=True):
    """Release all that is held; who and why are kept with the act, where they are said. A body is not required."""

    reason: str = ""
    who: Who = ""


class SetSlack(msgspec.Struct, forbid_unknown_fields=True):
    """Hold with this slack (such as "8s", at most hold_at_most) `for` a time (such as "30m", at most 24 h).

    `slack` null: the configured slack holds again from now on; then without `for`.
    """

    slack: str | None
    reason: Reason
    for_: str | None = msgspec.field(default=None, name="for")
    who: Who = ""


class PauseSink(msgspec.Struct, forbid_unknown_fields=True):
    """Why a sink is handed nothing more, or is handed batches again."""

    reason: Reason
    who: Who = ""


def who_of(request: web.BaseRequest, body_who: str) -> str:
    """Who acts: the one that access control knows, else whom the body names, else "unknown"."""
    known = request.get(WHO)
    return str(known) if known else body_who.strip() or UNKNOWN


async def post_excuse(request: web.Request) -> web.Response:
    """Do not wait for a source until it speaks again."""
    runtime = runtime_of(request)
    excuse = await read_act(request, Excuse)
    feed, source = runtime.feed, excuse.source
    if source not in feed.state.sources.numbers:
        raise NotThere(f"no source {source[:100]!r} has been heard or expected in feed {runtime.config.name}")
    reason, who = excuse.reason[:REASON_CHARACTERS_AT_MOST], who_of(request, excuse.who)
    await runtime.act(lambda now_ns, token: feed.excuse(source, reason, now_ns, token, who), _bytes(reason, who))
    return web.Response(status=204)


async def post_drain(request: web.Request) -> web.Response:
    """Release all that is held, in order; what is older than that and still comes is late."""
    runtime = runtime_of(request)
    # A body was not looked at before it could say anything: what is not JSON by its own word is passed over still.
    told = await read_act(request, Drain) if request.can_read_body and _is_json(request) else Drain()
    reason, who = told.reason[:REASON_CHARACTERS_AT_MOST], who_of(request, told.who)
    await runtime.act(lambda now_ns, token: runtime.feed.drain(now_ns, token, who, reason), _bytes(reason, who))
    return web.Response(status=204)


async def post_slack(request: web.Request) -> web.Response:
    """Set the slack for a time, or end that early."""
    runtime = runtime_of(request)
    chosen = await read_act(request, SetSlack)
    reason, who = _reason(chosen.reason), who_of(request, chosen.who)
    slack_ns, for_ns = _slack(chosen, runtime.config.hold_at_most_ns)
    await runtime.act(
        lambda now_ns, token: runtime.feed.set_slack(slack_ns, for_ns, reason, now_ns, token, who), _bytes(reason, who)
    )
    return web.Response(status=204)


async def post_pause(request: web.Request) -> web.Response:
    """Hand a sink nothing more until it is resumed."""
    return await _pause(request, on=True)


async def post_resume(request: web.Request) -> web.Response:
    """Hand a sink batches again, from where it stands."""
    return await _pause(request, on=False)


async def _pause(request: web.Request, *, on: bool) -> web.Response:
    runtime, sink = runtime_of(request), request.match_info["sink"]
    told = await read_act(request, PauseSink)
    reason, who = _reason(told.reason), who_of(request, told.who)
    _require_sink(runtime, sink)
    await runtime.act(
        lambda now_ns, token: runtime.feed.pause(sink, on, reason, now_ns, token, who), _bytes(reason, who)
    )
    return web.Response(status=204)


def _require_sink(runtime: FeedRuntime, sink: str) -> None:
    """The keeper of the late lane is no sink of the user's: without it a feed would soon take nothing more."""
    able = sorted(name for name in runtime.feed.state.outbox.positions if name != LANE_STORE)
    if sink not in able:
        raise NotThere(f"feed {runtime.config.name} has no sink {sink[:100]!r}; there are: {', '.join(able) or 'none'}")


def _slack(chosen: SetSlack, at_most_ns: int) -> tuple[int | None, int]:
    if chosen.slack is None:
        if chosen.for_ is not None:
            raise _unsound("/for", "must be left out where `slack` is null: that ends it now")
        return None, 0
    if chosen.for_ is None:
        raise _unsound("/for", 'must say for how long, such as "30m"')
    slack_ns, for_ns = _duration("/slack", chosen.slack), _duration("/for", chosen.for_)
    if slack_ns > at_most_ns:
        raise _unsound("/slack", f"{chosen.slack} is more than hold_at_most, which is {duration_text(at_most_ns)}")
    if not 0 < for_ns <= SLACK_FOR_AT_MOST_NS:
        raise _unsound("/for", f"{chosen.for_[:50]} must be more than 0 and at most 24h; set it again when it ends")
    return slack_ns, for_ns


def _duration(place: str, text: str) -> int:
    try:
        return duration_ns(text)
    except ValueError as error:
        raise _unsound(place, f"{text[:50]!r} {error}") from None


def _reason(text: str) -> str:
    if not text.strip():
        raise _unsound("/reason", "must say why")
    return text


def _unsound(place: str, fault: str) -> BodyError:
    return BodyError(422, "Unprocessable Content", f"{place}: {fault}")


def _is_json(request: web.Request) -> bool:
    return request.content_type == "application/json"


def _bytes(*texts: str) -> int:
    return sum(len(text.encode()) for text in texts)
