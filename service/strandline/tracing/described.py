"""The trace's address in the OpenAPI document: parameters, and what an answer holds. Data only."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

from ..ingest.values import ID_BYTES_AT_MOST, SOURCE_BYTES_AT_MOST
from .scanning import MATCHES_AT_MOST

Json = dict[str, Any]
FATES = ("held", "released", "late", "quarantined", "duplicate", "unknown")
_TEXT: Json = {"type": ["string", "null"]}
_WHOLE: Json = {"type": ["integer", "null"]}
_OBJECT: Json = {"type": "object"}


def _of(**properties: Json) -> Json:
    return {"type": "object", "required": sorted(properties), "properties": properties}


def trace_path(feed: Json, query: Callable[[str, str, Json], Json], problems: Json) -> Json:
    """The address as OpenAPI has it; `feed` is the path's parameter, `query` makes one of a query."""
    answer = {"description": "what became of each, and what was searched", "content": {
        "application/json": {"schema": _answer()}
    }}  # fmt: skip
    return {
        "get": {
            "summary": "Where an event is now, and why: by its id, or by its time and source",
            "description": "Either id or time is needed. Reads the journal, to a limit; one at a time for each feed.",
            "parameters": [
                feed,
                query("id", "the event's id", {"type": "string", "minLength": 1, "maxLength": ID_BYTES_AT_MOST}),
                query("time", "the event's own time: RFC 3339, or an integer in the feed's unit", {"type": "string"}),
                query(
                    "source", "only events of this source",
                    {"type": "string", "minLength": 1, "maxLength": SOURCE_BYTES_AT_MOST},
                ),
            ],
            "responses": {"200": answer, **problems},
        }
    }  # fmt: skip


def _answer() -> Json:
    mark = _of(at=_TEXT, at_ns=_WHOLE, since=_TEXT, cause=_TEXT, explanation=_TEXT, source=_TEXT, mark_position=_WHOLE)
    arrival = _of(
        position=_WHOLE, arrived=_TEXT, arrived_ns=_WHOLE, line=_WHOLE, events=_WHOLE, idempotency_key=_TEXT
    )
    match = _of(
        event=_TEXT,
        event_bytes=_WHOLE,
        time=_TEXT,
        time_ns=_WHOLE,
        source=_TEXT,
        matched_by={"enum": ["id", "time", "text", "kept"]},
        verified={"type": "boolean"},
        arrival=arrival,
        watermark={"oneOf": [mark, {"type": "null"}], "description": "the one that stood when it arrived"},
        fate={"enum": list(FATES), "description": "a member of this name says more"},
        explanation={"type": "string"},
    )
    return _of(
        feed={"type": "string"},
        asked=_of(id=_TEXT, time=_TEXT, time_ns=_WHOLE, source=_TEXT),
        found={"type": "integer", "minimum": 0},
        matches={"type": "array", "maxItems": MATCHES_AT_MOST, "items": match},
        searched=_OBJECT,
        notes={"type": "array", "items": {"type": "string"}},
    )
