"""The OpenAPI 3.1 document at /openapi.json: what each address takes and answers, from the same types.

Data only; the addresses themselves are registered in `app`, and a test compares the two lists.
"""

from __future__ import annotations

from functools import cache
from typing import Any

import msgspec

from .acting import Drain, Excuse, PauseSink, SetSlack
from .caution import CAUTION
from .core.effects import Outcome
from .errors import FAULT_REASONS, REFUSALS
from .hold_answer import ActsAnswer, HoldsAnswer
from .ingest.endpoint import Promise
from .ingest.formats import FORMATS, NDJSON
from .lane_acts import Readmit, Resend
from .openapi_access import guarded, schemes
from .reporting.described import report_path
from .tracing.described import trace_path

Json = dict[str, Any]
# A schema describes JSON; an item that is no event is a fault in the answer, so it is no matter of these schemas.
_BODIES: dict[str, Json] = {
    "application/json": {"type": ["object", "array"]},
    "application/cloudevents+json": {"type": "object"},
    "application/cloudevents-batch+json": {"type": "array"},
}
_FEED: Json = {
    "name": "feed",
    "in": "path",
    "required": True,
    "description": "name of a configured feed",
    "schema": {"type": "string", "pattern": "^[a-z0-9][a-z0-9-]{0,62}$"},
}


_SINK: Json = _FEED | {"name": "sink", "description": "name of one of the feed's sinks", "schema": {"type": "string"}}
_KEY: Json = {
    "name": "Idempotency-Key",
    "in": "header",
    "required": False,
    "description": "a text in double quotes that a retry repeats: it is then answered as the first request was",
    "schema": {"type": "string", "pattern": '^"([ !#-\\[\\]-~]|\\\\["\\\\]){1,1024}"$'},
}


def _query(name: str, description: str, schema: Json) -> Json:
    return {"name": name, "in": "query", "required": False, "description": description, "schema": schema}


_WHOLE: Json = {"type": "integer", "minimum": 0, "maximum": 10**18 - 1}
_MS: Json = {"type": "integer", "minimum": 0, "maximum": 9_223_372_036_854}
_DURATION = r"[0-9]{1,9}(\.[0-9]{1,9})?(ns|us|ms|s|m|h)"
_SLACKS: Json = {"type": "string", "pattern": f"^{_DURATION}(,{_DURATION}){{0,99}}$"}
_PAGE = [
    _query("after", "rows behind this number; a page's `next_after`", _WHOLE),
    _query("limit", "rows of one page, at most 1000", _WHOLE),
]


def _problems(*statuses: int) -> Json:
    titles = {
        400: "a parameter or a header is not what it should be",
        404: "there is no such feed or source",
        408: "the body did not come in time",
        409: "the first request with this key is not answered yet, or the sink is paused",
        410: "the batch asked for is no longer at hand here",
        413: "the body, or what it decompresses to, is larger than the feed's limits",
        415: "media type or content coding is not supported (then Accept-Encoding says which are)",
        422: "the body cannot be read as what it says it is",
        429: "a limit is reached; Retry-After says when to come again",
        503: "stopping, starting, out of disk, or stopped after a failed write",
    }
    content = {"application/problem+json": {"schema": {"$ref": "#/components/schemas/Problem"}}}
    return {str(status): {"description": titles[status], "content": content} for status in statuses}


def _answer(description: str, schema: Json, media_type: str = "application/json") -> Json:
    return {"200": {"description": description, "content": {media_type: {"schema": schema}}}}


def _get(summary: str, responses: Json, parameters: list[Json] | None = None) -> Json:
    return {"get": {"summary": summary, "parameters": parameters or [], "responses": responses}}


def _act(summary: str, schema: str | None, *, required: bool = True) -> Json:
    operation: Json = {
        "summary": summary,
        "parameters": [_FEED],
        "responses": {
            "204": {"description": "durable"},
            **_problems(404, 408, 413, 422, 429, 503),
        },
    }
    if schema:
        content = {"application/json": {"schema": {"$ref": f"#/components/schemas/{schema}"}}}
        operation["requestBody"] = {"required": required, "content": content}
    return {"post": operation}


def _events() -> Json:
    content = {name: {"schema": _BODIES.get(name, {}) | {"description": form.what}} for name, form in FORMATS.items()}
    return {
        "post": {
            "summary": "Send events; answered once all of them are durable",
            "description": "A request is one arrival. Content-Encoding gzip and zstd are understood.",
            "parameters": [_FEED, _KEY],
            "requestBody": {"required": True, "content": content},
            "responses": {
                **_answer("what became of the events", {"$ref": "#/components/schemas/Outcome"}),
                **_problems(400, 404, 408, 409, 413, 415, 422, 429, 503),
            },
        }
    }


def _again() -> Json:
    acts = {
        "late/resend": ("Send late events to a sink once more, in repair batches", "Resend"),
        "refused/resend": ("Send what a sink refused once more, in repair batches", "Resend"),
        "quarantine/readmit": ("Take lines in quarantine in once more, after a fix", "Readmit"),
    }
    paths = {}
    for path, (summary, schema) in acts.items():
        act = _act(summary, schema)
        del act["post"]["responses"]["204"]
        act["post"]["responses"] |= _answer("what was done, in counts", {"type": "object"}) | _problems(409)
        paths[f"/v1/feeds/{{feed}}/{path}"] = act
    return paths


def _sink_acts() -> Json:
    acts = {
        "pause": "Hand this sink nothing more until it is resumed; others go on, limits hold",
        "resume": "Hand this sink batches again, from where it stands",
    }
    paths = {f"/v1/feeds/{{feed}}/sinks/{{sink}}/{name}": _act(says, "PauseSink") for name, says in acts.items()}
    for act in paths.values():
        act["post"]["parameters"] = [_FEED, _SINK]
    return paths


def _history() -> Json:
    schemas = "#/components/schemas"
    return {
        "/v1/feeds/{feed}/holds": _get(
            "Who held the feed, from when to when and why; totals count what lies within the time asked about",
            {**_answer("the newest first", {"$ref": f"{schemas}/HoldsAnswer"}), **_problems(400, 404)},
            [
                _FEED,
                _query("from", "an RFC 3339 time: only holds that reach beyond it", {"type": "string"}),
                _query("to", "an RFC 3339 time: only holds that began before it", {"type": "string"}),
                _query("limit", "how many are listed (500), at most 2000", _WHOLE),
                _query("at_least", "only list holds that lasted so long (0s), such as 10s", {"type": "string"}),
            ],
        ),
        "/v1/feeds/{feed}/acts": _get(
            "What operators did to the feed: the last 1000 acts",
            {**_answer("the newest first", {"$ref": f"{schemas}/ActsAnswer"}), **_problems(400, 404)},
            [_FEED, _query("limit", "how many are listed (100), at most 1000", _WHOLE)],
        ),
        "/v1/feeds/{feed}/report": report_path(_FEED, _query, _problems(400, 404)),
    }


def _streams() -> Json:
    ordered = _query("after", "batches behind this number; without it those released from now on", _WHOLE)
    return {
        "/v1/feeds/{feed}/ordered": _get(
            "The ordered output as it is released, without end",
            {
                **_answer("one JSON line an event", {"type": "string"}, NDJSON),
                **_problems(400, 404, 410),
            },
            [_FEED, ordered],
        ),
        "/v1/feeds/{feed}/capture": _get(
            "A capture of what the feed takes in from now on",
            {
                **_answer("the capture, as it is recorded", {"type": "string"}, "application/octet-stream"),
                **_problems(400, 404, 429, 503),
            },
            [
                _FEED,
                _query("seconds", "how long (60)", {"type": "integer", "minimum": 1, "maximum": 86_400}),
                _query("events", "0: without the events' bytes", {"type": "integer", "minimum": 0, "maximum": 1}),
            ],
        ),
    }


def _dashboard() -> Json:
    return {
        "/v1/feeds/{feed}/live": _get(
            "The feed as it stands, twice a second, without end: what the dashboard draws",
            {
                **_answer("events named moment; gone: a partition that moved", {"type": "string"}, "text/event-stream"),
                **_problems(400, 404, 429),
            },
            [
                _FEED,
                _query("q", "sources whose name contains this come first", {"type": "string", "maxLength": 256}),
                _query("lanes", "sources to show (20)", {"type": "integer", "minimum": 1, "maximum": 100}),
            ],
        ),
        "/v1/feeds/{feed}/history": _get(
            "The last hours of the feed as columns, at most a day, in coarser steps the older",
            {**_answer("columns of equal length; times in milliseconds", {"type": "object"}), **_problems(400, 404)},
            [
                _FEED,
                _query("from_ms", "milliseconds since 1970 (15 minutes before to_ms)", _MS),
                _query("to_ms", "milliseconds since 1970 (now)", _MS),
                _query("points", "steps at most (600)", {"type": "integer", "minimum": 2, "maximum": 2000}),
            ],
        ),
    }


def _lanes() -> Json:
    document: Json = {"type": "object"}
    source = _query("source", "only this source", {"type": "string"})
    return {
        "/v1/feeds/{feed}/late": _get(
            "Late events",
            {**_answer("by number; times and `late_by_s` to read, `*_ns` exact", document), **_problems(400, 404, 503)},
            [_FEED, *_PAGE, source],
        ),
        "/v1/feeds/{feed}/quarantine": _get(
            "Lines in quarantine",
            {**_answer("by number, those of one request in order of `line`", document), **_problems(400, 404, 503)},
            [_FEED, *_PAGE],
        ),
        "/v1/feeds/{feed}/refused": _get(
            "Events of batches that sinks refused for good",
            {**_answer("events, with sink and reason", document), **_problems(400, 404, 503)},
            [_FEED, *_PAGE, _query("sink", "only what this sink refused", {"type": "string"})],
        ),
    }


def _paths() -> Json:
    document: Json = {"type": "object"}
    return {
        "/v1/feeds/{feed}/events": _events(),
        "/v1/feeds/{feed}/marks": _act("Promise: nothing older will come from this source", "Promise"),
        "/v1/feeds/{feed}/excuse": _act("Do not wait for this source until it speaks again", "Excuse"),
        "/v1/feeds/{feed}/drain": _act("Release all that is held, in order", "Drain", required=False),
        **_sink_acts(),
        **_history(),
        **_again(),
        "/v1/feeds": _get("Every feed at work here; whether there is a cluster", _answer("feeds", document)),
        "/v1/cluster": _get(
            "Who owns which partition, since when, how far behind; how it stands in a sentence",
            {**_answer("the cluster", document), **_problems(404)},
        ),
        "/v1/feeds/{feed}": _get(
            "Order, watermark (with order source: of the source furthest behind), slack, hold, books, hops, sinks",
            {**_answer("the feed", document), **_problems(404)},
            [_FEED],
        ),
        "/v1/feeds/{feed}/sources": _get(
            "Sources; with order source each with its own watermark, and its own slack and late share if steered",
            {**_answer("sources", document), **_problems(400, 404)},
            [_FEED, *_PAGE],
        ),
        "/v1/feeds/{feed}/slack": _act(
            "Set the slack for a time, or end that early", "SetSlack"
        )
        | _get(
            "How long to wait: the late share that each slack would give, from the lateness remembered",
            {**_answer("slacks, lateness, steering; what of it is exact", document), **_problems(400, 404)},
            [_FEED, _query("at", "slacks to answer for, such as 3.2s,5s; else a grid", _SLACKS)],
        ),
        **_lanes(),
        "/v1/feeds/{feed}/trace": trace_path(_FEED, _query, _problems(400, 404, 429, 503)),
        **_streams(),
        **_dashboard(),
        "/metrics": _get("Metrics", _answer("exposition format", {"type": "string"}, "text/plain")),
        "/health/live": _get("The process is alive", _answer("alive", document)),
        "/health/ready": _get("Ready to take events", {**_answer("ready", document), **_problems(503)}),
        "/openapi.json": _get("This document", _answer("OpenAPI 3.1", document)),
    }


@cache
def document() -> Json:
    """The whole document."""
    bodies = (Promise, Excuse, Drain, SetSlack, PauseSink, Resend, Readmit)
    _, components = msgspec.json.schema_components(
        [Outcome, *bodies, HoldsAnswer, ActsAnswer], ref_template="#/components/schemas/{name}"
    )
    reasons = ", ".join(sorted(FAULT_REASONS))
    components["AnswerFault"]["description"] = f"One line that was not accepted; reason is one of: {reasons}."
    components["Problem"] = {
        "description": f"RFC 9457. `type` ends in one of: {', '.join(sorted(REFUSALS))}, or is about:blank.",
        "type": "object",
        "required": ["type", "title", "status", "detail"],
        "properties": {
            "type": {"type": "string"},
            "title": {"type": "string"},
            "status": {"type": "integer", "minimum": 400, "maximum": 599},
            "detail": {"type": "string"},
        },
    }
    return {
        "openapi": "3.1.0",
        "info": {
            "title": "Strandline",
            "version": "1",
            "description": f"Keeps timestamped event feeds in order although events arrive late. {CAUTION}",
        },
        "paths": guarded(_paths()),
        "components": {"schemas": components, "securitySchemes": schemes()},
    }
